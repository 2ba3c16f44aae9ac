"""The README names every setting, endpoint, warning and command, and nothing that does not exist."""

import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from service.core.checks.all import CHECKS
from service.settings import PREFIX, Settings
from service.web.app import create_app

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text("utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text("utf-8")


@pytest.fixture(scope="module")
def document(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    return create_app(Settings(data_dir=tmp_path_factory.mktemp("data"))).openapi()


def test_every_setting_stands_in_the_table_with_its_default_and_meaning() -> None:
    rows = {row[1]: row for row in re.finditer(rf"\| `({PREFIX}\w+)` \| (.*?) \| (.*?) \|\n", README)}
    assert set(rows) == {PREFIX + name.upper() for name in Settings.model_fields}
    for name, field in Settings.model_fields.items():
        row = rows[PREFIX + name.upper()]
        assert row[2] == ("none" if field.default in (None, ()) else f"`{field.default}`"), name
        assert row[3] == field.description, name


def test_every_endpoint_is_named(document: dict[str, Any]) -> None:
    named = set(re.findall(r"`(GET|POST|DELETE) (/[^`?]*)", README))
    there = {(method.upper(), path) for path, item in document["paths"].items() for method in item}
    assert {one for one in there if one not in named} == set()
    assert {one for one in named if one not in there and not one[1].startswith("/history")} == set()


def test_every_warning_is_named() -> None:
    codes = {check.__name__ for check in CHECKS}
    table = README.split("## Verdicts and warnings")[1].split("\n## ")[0]
    assert set(re.findall(r"^\| `(\w+)` \|", table, re.MULTILINE)) == codes


def test_every_command_has_help_and_is_named() -> None:
    shown = subprocess.run(
        [sys.executable, "-P", "-m", "service.cli", "--help"], capture_output=True, text=True, check=True
    ).stdout
    commands = re.findall(r"^    (\w+) ", shown, re.MULTILINE)
    assert {"serve", "worker", "demo", "migrate", "keys"} <= set(commands)
    for command in commands:
        assert f"leastbend {command}" in README + DEVELOPERS, command


def test_files_that_the_documents_name_exist() -> None:
    for path in re.findall(r"`((?:service|tests|migrations|openapi_examples)/[\w/.*-]+)`", README + DEVELOPERS):
        assert list(ROOT.glob(path)) or (ROOT / path).exists(), path


def test_the_first_command_of_the_readme_installs_what_the_lock_pins() -> None:
    assert "pip install --no-compile -r requirements-run.lock" in README
    assert "pip install -r requirements.lock && .venv/bin/pytest" in README
    pins = {}
    for name in ("requirements-run.lock", "requirements.lock"):
        lock = (ROOT / name).read_text("utf-8")
        assert "://" not in lock
        assert lock.count("--hash=sha256:") > lock.count("==") > 50
        pins[name] = set(re.findall(r"^[\w.-]+==\S+", lock, re.MULTILINE))
    assert pins["requirements-run.lock"] < pins["requirements.lock"]
