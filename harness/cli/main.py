"""The console entry: owns exit statuses, and turns every failure into one line what and one line what to do.

0 PASS, or nothing was required and the stream was aligned · 1 FAIL, a stored verdict and nothing else ·
2 bad usage or profile · 3 UNDECIDED, or never aligned · 4 a link, an instrument or the store failed, not a
single bit came, or `verify` found a difference · 5 a defect in bitassay · 130 interrupted · 143 terminated.
"""

from __future__ import annotations

import os
import sys

from harness.cli.failure import Failure, failure_of


def main() -> None:
    """Run the command line and leave with its exit status."""
    debug = "--debug" in sys.argv
    # A closed output (`1>&-`) leaves None behind: whoever closed it wants no words, the run goes on.
    sys.stdout = sys.stdout or open(os.devnull, "w", encoding="utf-8")  # noqa: SIM115
    sys.stderr = sys.stderr or open(os.devnull, "w", encoding="utf-8")  # noqa: SIM115
    # The matrices here are tiny: threads for them only spin, and a fit takes five times as long on a busy computer.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    try:
        from harness.cli.app import run_app

        status = run_app([argument for argument in sys.argv[1:] if argument != "--debug"])
        sys.stdout.flush()
    except BrokenPipeError:
        # The reader of our output went away (`bitassay runs | head`): no failure of ours.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        status = 0
    except KeyboardInterrupt:
        print("bitassay: interrupted", file=sys.stderr)
        status = 130
    except BaseException as error:
        if debug and not isinstance(error, SystemExit):
            import traceback

            traceback.print_exc()
        status = _report(failure_of(error))
    sys.exit(status)


def _report(failure: Failure) -> int:
    if failure.what:
        print(f"bitassay: {failure.what}", file=sys.stderr)
    if failure.advice:
        print(f"  {failure.advice}", file=sys.stderr)
    return failure.status


if __name__ == "__main__":
    main()
