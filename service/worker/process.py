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
    try:
        _, tag, pid, started = worker.rsplit("/", 3)
        number = int(pid)
    except ValueError:
        return False
    if tag != host_tag() or started == "-":
        return False
    return _started(number) != started


def end(worker: str) -> None:
    """Kill the worker of this name, if it is a process of this host that still lives."""
    _, tag, pid, _ = worker.rsplit("/", 3) if worker.count("/") >= 3 else ("", "", "", "")
    if tag == host_tag() and not is_gone(worker):
        with contextlib.suppress(OSError):
            os.kill(int(pid), signal.SIGKILL)


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
