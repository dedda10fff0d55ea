"""Who holds a claim: a process, so that others can tell when it has died."""

from __future__ import annotations

import os
import socket
from pathlib import Path


def _place() -> str:
    """The machine, and within it the space in which process numbers mean something (containers have their own)."""
    try:
        space = os.readlink("/proc/self/ns/pid")
    except OSError:
        space = ""
    return f"{socket.gethostname()}{space}"


def _started(pid: int) -> str:
    """When a process began, in the kernel's ticks; empty where that is not told."""
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[19]
    except (OSError, IndexError, UnicodeDecodeError):
        return ""


def this_process(token: str) -> str:
    """A name for this process, told apart by ``token`` from others that it may hold."""
    return "|".join((_place(), str(os.getpid()), _started(os.getpid()), token))


def is_dead(owner: str) -> bool:
    """Whether that process is known to have ended; False where that cannot be known from here."""
    place, _, rest = owner.partition("|")
    pid_text, _, rest = rest.partition("|")
    started = rest.partition("|")[0]
    if place != _place() or not pid_text.isdigit() or os.name == "nt":
        return False
    try:
        os.kill(int(pid_text), 0)
    except ProcessLookupError:
        return True
    except OSError:
        return False
    return bool(started) and _started(int(pid_text)) != started
