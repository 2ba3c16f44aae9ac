"""The worker with an analysis that stays inside one call of C code for minutes: a singular value decomposition."""

import argparse
import sys
from typing import Any

import numpy as np

from service.settings import Settings
from service.worker.main import work
from service.workflows import run


def hang(*_: Any, **__: Any) -> None:
    """Far longer than any test waits."""
    np.linalg.svd(np.random.default_rng(0).normal(size=(5000, 5000)))


if __name__ == "__main__":
    parser = argparse.ArgumentParser()
    parser.add_argument("--parent", type=int)
    run.analyse = hang  # type: ignore[assignment]
    sys.exit(work(Settings(), parent=parser.parse_args().parent))
