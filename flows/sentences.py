"""Which errors are sentences for the user: those of our own rooms, of the operating system, and memory that is used up.

All others are bugs.
"""

from __future__ import annotations

ROOMS = ("flows", "detectors", "warehouse", "dashboards")


def is_sentence(problem: Exception) -> bool:
    """Tell whether the error was raised to be read by a user."""
    return isinstance(problem, OSError | MemoryError) or type(problem).__module__.split(".")[0] in ROOMS


def sentence(problem: Exception) -> str:
    """What to tell the user."""
    if isinstance(problem, OSError) and problem.strerror:
        where = problem.filename or "operating system"
        return f"{where}: {problem.strerror}; nothing was lost, mend it and run again"
    if isinstance(problem, MemoryError):
        return "no memory is left; nothing was lost: give the run more, or lower [workers] processes, and run again"
    return str(problem)
