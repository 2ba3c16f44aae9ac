"""The running service keeps to its own document: schemathesis with every check, valid and invalid requests."""

import os
import re
import subprocess
import sys
from pathlib import Path

import httpx
import pytest

from tests.web.real import Real, make_key, real_service

HERE = Path(__file__).parent
HOOKS = "tests.web.contract.hooks"
ROOT = HERE.parents[2]


# One worker of schemathesis: in two threads CPython 3.11's ast.parse, which hypothesis uses, fails now and then
# ("AST constructor recursion depth mismatch").
def run(real: Real, key: str, *options: str, seconds: int) -> str:
    """schemathesis's own report. Fails with it if anything was found."""
    command = [sys.executable, "-m", "schemathesis.cli", "--config-file", str(HERE / "schemathesis.toml"), "run"]
    command += [f"{real.address}/openapi.json", "--header", f"Authorization: Bearer {key}", "--no-color", *options]
    done = subprocess.run(
        command,
        cwd=ROOT,
        env={**os.environ, "SCHEMATHESIS_HOOKS": HOOKS, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        timeout=seconds,
        check=False,
    )
    assert done.returncode == 0, done.stdout[-20_000:] + done.stderr[-2000:]
    return done.stdout


def check(directory: Path, *options: str, least: int, seconds: int) -> None:
    """No failure, at least so many requests, no status of 500 or more, no traceback in the log."""
    key = make_key(directory, "contract", "admin")
    with real_service(directory, "--workers", "2", requests_per_minute="0") as real:
        httpx.get(f"{real.address}/openapi.json", timeout=120).raise_for_status()  # made at the first call
        report = run(real, key, *options, seconds=seconds)
        log, answers = real.log(), real.answers()
    operations = re.search(r"Tested: (\d+)", report)
    sys.stdout.write(f"{len(answers)} requests, {operations and operations[1]} operations\n")
    assert [line for line in answers if line["status"] >= 500] == []
    assert [line for line in log if "exc_info" in line or line["level"] in ("ERROR", "CRITICAL")] == []
    assert len(answers) >= least


@pytest.mark.long
@pytest.mark.timeout(1200)
def test_five_thousand_requests(tmp_path: Path) -> None:
    check(tmp_path, "--max-examples", "220", "--seed", "20260504", least=5_000, seconds=1100)


@pytest.mark.slow
@pytest.mark.timeout(5400)
def test_twenty_thousand_requests(tmp_path: Path) -> None:
    check(tmp_path, "--max-examples", "1700", least=20_000, seconds=5300)
