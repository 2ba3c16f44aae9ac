"""The Prefer header (RFC 7240): `wait=N` and `respond-async`."""

import re
from collections.abc import Sequence
from typing import Annotated

from fastapi import Header

Prefer = Annotated[
    str | None,
    Header(
        alias="Prefer",
        description="RFC 7240. `wait=N`: answer when the job has ended, or after N seconds. `respond-async`: answer at"
        " once, or with `wait=N` after that time.",
    ),
]
TOKEN = r"[!#$%&'*+.^_`|~0-9A-Za-z-]+"
QUOTED = r'"(?:[^"\\]|\\.)*"'
WORD = re.compile(rf"({TOKEN})(?:[ \t]*=[ \t]*({TOKEN}|{QUOTED}))?")
PARTS = re.compile(rf"(?:[^,;\"]|{QUOTED})+|[,;]")
SECONDS = re.compile(r"\d{1,9}")


def preferences(headers: Sequence[str]) -> dict[str, str]:
    """Preferences by name in lower case, without their parameters; of one that comes twice the first counts (§2)."""
    found: dict[str, str] = {}
    for header in headers:
        parameter = False
        for part in PARTS.findall(header):
            if part in ",;":
                parameter = part == ";"
                continue
            word = WORD.fullmatch(part.strip(" \t"))
            if word and not parameter:
                value = re.sub(r"\\(.)", r"\1", (word[2] or "").removeprefix('"').removesuffix('"'))
                found.setdefault(word[1].lower(), value)
    return found


def seconds_to_wait(asked: dict[str, str], *, most: float) -> float | None:
    """Seconds that the caller is willing to wait, no more than `most`; None if it says nothing (usable) of it.

    Preferences that cannot be read are ignored, as §2 asks.
    """
    wait = asked.get("wait", "")
    return min(float(wait), most) if SECONDS.fullmatch(wait) else None


def applied(asked: dict[str, str], seconds: float | None) -> str | None:
    """The Preference-Applied header: what was followed, with the wait that was granted. None: nothing was asked.

    `respond-async` together with `wait=N` is what §4.3 gives: wait so long, then answer 202.
    """
    followed = ["respond-async"] if "respond-async" in asked else []
    if seconds is not None:
        followed.append(f"wait={seconds:g}")
    return ", ".join(followed) or None
