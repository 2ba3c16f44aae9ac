"""Workers whose analysis is one ready result: what is left is the queue, the claim and the record."""

import argparse
import sys
from functools import lru_cache
from typing import Any

from service.core.analysis import analyse
from service.core.observations import Observations
from service.core.plan import Plan
from service.core.result import Result
from service.settings import Settings
from service.worker.main import work
from service.workflows import run


@lru_cache(maxsize=1)
def ready(points: int) -> list[Result]:
    """Computed at the first job."""
    del points
    return []


def trivial(observations: Observations, plan: Plan, **_: Any) -> Result:
    """The first job's result for every job of as many points."""
    kept = ready(observations.n)
    if not kept:
        kept.append(analyse(observations, plan))
    return kept[0]


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--parent", type=int)
    run.analyse = trivial
    sys.exit(work(Settings(), parent=parser.parse_args().parent))
