"""Run a program that does not outlive the process that started it; run as a script, by path.

``python tether.py PARENT_PID PROGRAM [ARGUMENT ...]`` asks Linux to send SIGTERM when the thread
that started it ends, then becomes the program. A script of its own, since a ``preexec_fn`` is
unsafe once threads run. Elsewhere than on Linux it only becomes the program.
"""

from __future__ import annotations

import os
import signal
import sys

PR_SET_PDEATHSIG = 1


def tethered(command: list[str]) -> list[str]:
    """Return a command line that runs ``command`` tethered to the calling thread."""
    return [sys.executable, "-I", "-S", __file__, str(os.getpid()), *command]


def main(parent: int, command: list[str]) -> None:
    """Ask for a SIGTERM at the parent's end, then become ``command``.

    Parameters
    ----------
    parent : int
        Process id of the one that starts us.
    command : list of str
        Path of the program and its arguments.

    Raises
    ------
    OSError
        If the program cannot be run.
    """
    if sys.platform == "linux":
        import ctypes

        ctypes.CDLL(None).prctl(PR_SET_PDEATHSIG, signal.SIGTERM, 0, 0, 0)
        if os.getppid() != parent:  # it died before we asked
            sys.exit(1)
    os.execv(command[0], command)


if __name__ == "__main__":
    main(int(sys.argv[1]), sys.argv[2:])
