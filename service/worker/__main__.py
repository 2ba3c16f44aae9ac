"""`python -m service.worker`: the worker processes of one installation, as the API's companion starts them."""

import argparse
import sys

from service.settings import Settings
from service.worker.main import work

if __name__ == "__main__":
    parser = argparse.ArgumentParser(prog="python -m service.worker", description=__doc__)
    parser.add_argument("--parent", type=int, help="process id of the parent; workers die with it")
    sys.exit(work(Settings(), parent=parser.parse_args().parent))
