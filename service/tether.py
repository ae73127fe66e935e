"""Tie a process to its parent: it is told to end when the parent ends, even by SIGKILL.

Run as a file it ties itself and becomes another program: `python tether.py PARENT_PID PROGRAM ARGUMENT…`.
So it imports nothing but the standard library.
"""

import ctypes
import os
import signal
import sys

_PR_SET_PDEATHSIG = 1


def end_with_parent(parent_pid: int) -> None:
    """Ask the kernel to send SIGTERM to this process when its parent ends; does nothing outside Linux.

    Args:
        parent_pid: the parent's process id; where it has already gone, this process exits.

    """
    if sys.platform != "linux":
        return
    ctypes.CDLL(None).prctl(_PR_SET_PDEATHSIG, signal.SIGTERM)
    if os.getppid() != parent_pid:
        sys.exit(0)


def tethered(command: list[str]) -> list[str]:
    """Return the command that runs `command` as a child that ends with this process.

    The child's process id is the program's own. It ends with the thread that starts it:
    start it from one that stays.
    """
    return [sys.executable, "-I", "-S", __file__, str(os.getpid()), *command]


if __name__ == "__main__":
    end_with_parent(int(sys.argv[1]))
    os.execv(sys.argv[2], sys.argv[2:])  # noqa: S606  the whole purpose
