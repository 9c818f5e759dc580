"""From an exception to what is printed: one line what is wrong, one line what to do, and the exit status."""

from __future__ import annotations

import sys
from dataclasses import dataclass

PASS, FAIL, USAGE, UNDECIDED, FAULT, DEFECT, INTERRUPTED, TERMINATED = 0, 1, 2, 3, 4, 5, 130, 143


@dataclass(frozen=True, slots=True)
class Failure:
    """What to print and how to leave."""

    what: str
    advice: str
    status: int


class UserError(Exception):
    """Something that whoever called can mend."""

    def __init__(self, what: str, advice: str = "", status: int = USAGE) -> None:
        super().__init__(what)
        self.what = what
        self.advice = advice
        self.status = status


# Class names, so that telling an error apart imports nothing that the command did not need.
_STATUS_BY_NAME = {
    "ProfileError": USAGE,
    "PatternError": USAGE,
    "PlanError": USAGE,
    "UnknownDriver": USAGE,
    "BrokenDriver": USAGE,
    "NoSuchRun": USAGE,
    "AmbiguousRun": USAGE,
    "StoreError": FAULT,
    "DriverError": FAULT,
}


def failure_of(error: BaseException) -> Failure:
    """Say what an exception means to the person at the bench."""
    if isinstance(error, SystemExit):
        code = error.code
        return Failure("", "", code if isinstance(code, int) else (0 if code is None else DEFECT))
    if isinstance(error, UserError):
        return Failure(error.what, error.advice, error.status)
    for kind in type(error).__mro__:
        if kind.__name__ in _STATUS_BY_NAME and hasattr(error, "what"):
            advice = getattr(error, "advice", "")
            return Failure(_one_line(error.what), _one_line(advice), _STATUS_BY_NAME[kind.__name__])
    usage = _usage(error)
    if usage is not None:
        return usage
    if isinstance(error, OSError) and error.filename is not None:
        return Failure(f"{error.filename}: {error.strerror}", "check the path and its permissions", FAULT)
    return Failure(
        f"a defect in bitassay itself: {type(error).__name__}: {_one_line(str(error))}",
        "what was measured is kept; run again with --debug for the details to report",
        DEFECT,
    )


def _usage(error: BaseException) -> Failure | None:
    names = {kind.__name__ for kind in type(error).__mro__}
    if "NoArgsIsHelpError" in names:
        context = getattr(error, "ctx", None)
        path = context.command_path if context is not None else "bitassay"
        return Failure("no command was given", f"`{path} --help` lists them, each with an example", USAGE)
    if "ClickException" in names:
        message = getattr(error, "format_message", lambda: str(error))()
        context = getattr(error, "ctx", None)
        path = context.command_path if context is not None else "bitassay"
        return Failure(_one_line(message), f"`{path} --help` shows how it is used", USAGE)
    if "Abort" in names:
        return Failure("interrupted", "", INTERRUPTED)
    return None


def _one_line(text: str) -> str:
    return " ".join(str(text).split())


def warn(line: str) -> None:
    """Print a line on standard error."""
    print(f"bitassay: {line}", file=sys.stderr)
