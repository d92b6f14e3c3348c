"""``python -m sweep`` and the command ``sweep``."""

from __future__ import annotations

import os
import sys
import traceback
from collections.abc import Sequence

from sweep.cli.grammar import read_arguments
from sweep.cli.output import (
    hush_broken_pipe,
    make_streams_safe,
    print_note,
    print_text,
    report_error,
)
from sweep.cli.parser import build_parser, wants_json
from sweep.errors import InputError, Interrupted, SweepError

BUG = 70
"""Exit code for a mistake of the program itself (EX_SOFTWARE of sysexits)."""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code; the tree in `sweep.errors` says which.

    Parameters
    ----------
    arguments
        What follows the program's name; ``sys.argv`` when left out.
    """
    given = list(sys.argv[1:] if arguments is None else arguments)
    make_streams_safe()
    try:
        code = _report(given)
        sys.stdout.flush()
    except BrokenPipeError:
        hush_broken_pipe()
        return 0
    return code


def _report(given: list[str]) -> int:
    """Run the command; what goes wrong is said once and becomes an exit code."""
    as_json = wants_json(given)
    try:
        return _run(given)
    except SweepError as error:
        return report_error(error, as_json=as_json)
    except KeyboardInterrupt:
        stopped = Interrupted("stopped on request", remedy="run the same command again to go on")
        return report_error(stopped, as_json=as_json)
    except BrokenPipeError:
        raise
    except OSError as error:
        return report_error(_system_refused(error), as_json=as_json)
    except Exception as error:  # noqa: BLE001 - the last stop before the terminal
        return _report_bug(error, as_json=as_json)


def _run(given: list[str]) -> int:
    parser = build_parser()
    options = read_arguments(parser, given)
    if options.version:
        from sweep.identity import PROGRAM_VERSION

        print_text(f"sweep {PROGRAM_VERSION}")
        return 0
    if options.command is None:
        print_note(parser.format_help())
        return 2
    code: int = options.run(options)
    return code


def _system_refused(error: OSError) -> SweepError:
    place = str(error.filename) if error.filename is not None else ""
    reason = error.strerror or str(error)
    return InputError(
        f"using {place}: the system says: {reason}" if place else f"the system says: {reason}",
        where=[place] if place else [],
        remedy="check that it is there, that it may be read and written, and that there is room",
    )


def _report_bug(error: Exception, *, as_json: bool) -> int:
    if os.environ.get("SWEEP_TRACEBACK"):
        traceback.print_exc()
    bug = SweepError(
        f"this is a mistake in the program: {type(error).__name__}: {error}",
        remedy="set SWEEP_TRACEBACK=1, run it again, and report what it prints",
    )
    report_error(bug, as_json=as_json)
    return BUG


if __name__ == "__main__":
    sys.exit(main())
