"""Processes: what a worker is called, whether one is surely gone, and dying with the parent."""

import contextlib
import ctypes
import functools
import hashlib
import os
import signal
import socket
import sys
from pathlib import Path

PR_SET_PDEATHSIG = 1  # prctl(2)
PROC = Path("/proc")
DEAD = ("Z", "X", "x")  # proc(5): zombie, dead


def worker_name() -> str:
    """This process's name, unlike any other's: host, tag of the host, process id and when that process started."""
    return f"{socket.gethostname()}/{host_tag()}/{os.getpid()}/{_started(os.getpid())}"


def is_gone(worker: str) -> bool:
    """Whether the worker of this name surely runs no more. Of another host's worker nothing is known: False."""
    known = _known(worker)
    return known is not None and _started(known[0]) != known[1]


def end(worker: str) -> None:
    """Kill the worker of this name, if it is a process of this host that still lives."""
    known = _known(worker)
    if known is not None and _started(known[0]) == known[1]:
        with contextlib.suppress(OSError):
            os.kill(known[0], signal.SIGKILL)


def _known(worker: str) -> tuple[int, str] | None:
    """Process id and start of a worker of this host; None of any other."""
    parts = worker.rsplit("/", 3)
    if len(parts) != 4 or parts[1] != host_tag() or not (parts[2].isdecimal() and parts[3].isdecimal()):
        return None
    return int(parts[2]), parts[3]


@functools.lru_cache(maxsize=1)
def host_tag() -> str:
    """Names the set of process ids that this one belongs to: this boot of this machine, this container."""
    try:
        boot = (PROC / "sys/kernel/random/boot_id").read_text().strip()
        namespace = str((PROC / "self/ns/pid").readlink())
    except OSError:
        boot, namespace = socket.gethostname(), ""
    return hashlib.sha256(f"{boot} {namespace}".encode()).hexdigest()[:8]


def die_with(parent: int) -> None:
    """Have the kernel kill this process when the parent dies, and die now if it already has (Linux; prctl(2))."""
    if sys.platform == "linux":
        ctypes.CDLL(None, use_errno=True).prctl(PR_SET_PDEATHSIG, signal.SIGKILL, 0, 0, 0)
    if os.getppid() != parent:
        os._exit(1)


def _started(pid: int) -> str:
    """Start of a process in clock ticks since boot; "-" where that cannot be known, "gone" for no live process."""
    if not (PROC / "self/stat").exists():
        return "-"
    try:
        fields = (PROC / str(pid) / "stat").read_text().rsplit(")", 1)[1].split()
    except OSError:
        return "gone"
    return "gone" if fields[0] in DEAD else fields[19]
