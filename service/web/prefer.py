"""The Prefer header (RFC 7240): `wait=N` and `respond-async`."""

import re
from collections.abc import Sequence
from typing import Annotated

from fastapi import Header

Prefer = Annotated[str | None, Header(description="`wait=N`: answer when the job has ended, or after N seconds.")]
WAIT = re.compile(r"wait\s*=\s*\"?(\d{1,6})\"?", re.IGNORECASE)


def seconds_to_wait(headers: Sequence[str], *, most: float) -> float | None:
    """Seconds that the caller is willing to wait, no more than `most`; None if it says nothing (usable) of it.

    `respond-async` together with `wait=N` is what RFC 7240 §4.3 gives: wait so long, then answer 202.
    Preferences that cannot be read are ignored, as §2 asks.
    """
    for header in headers:
        for preference in header.split(","):
            found = WAIT.fullmatch(preference.split(";")[0].strip())
            if found:
                return min(float(found[1]), most)
    return None
