"""The command line: arguments, printing, exit codes. ``main`` is what ``loopassay`` starts."""

from __future__ import annotations

import os
import sys
import traceback
from collections.abc import Mapping, Sequence

from audit.cli import screen
from audit.cli.arguments import parser
from audit.errors import AuditError

DEBUG_VARIABLE = "LOOPASSAY_DEBUG"
INTERRUPTED = 130


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code; what goes wrong is one message, no traceback."""
    words = sys.argv[1:] if arguments is None else list(arguments)
    _have_streams()
    _never_fail_on_a_letter()
    try:
        return _run(words)
    except AuditError as wrong:
        screen.messages().print(str(wrong))
        return wrong.exit_code
    except KeyboardInterrupt:
        screen.messages().print("interrupted")
        return INTERRUPTED
    except BrokenPipeError:
        # The reader has had enough (a pager, head); what is left has nowhere to go.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as failure:  # noqa: BLE001 - the edge: every other failure ends here as exit 1
        return _unexpected(failure, "--debug" in words, os.environ)


def _run(words: Sequence[str]) -> int:
    parsed = parser().parse_args(words)
    # Only now: what a command needs takes a second to import, `--help` shall not.
    from audit.cli.commands import run

    code = run(parsed)
    sys.stdout.flush()
    return code


def _have_streams() -> None:
    """A closed stream, as some schedulers start a command with, is one that nobody reads."""
    for name in ("stdout", "stderr"):
        if getattr(sys, name) is None:
            # left open until the process ends
            setattr(sys, name, open(os.devnull, "w", encoding="utf-8"))  # noqa: SIM115


def _never_fail_on_a_letter() -> None:
    """A terminal that knows no arrow or dash shows a question mark instead of failing."""
    for stream in (sys.stdout, sys.stderr):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="replace")


def _unexpected(failure: Exception, debug: bool, env: Mapping[str, str]) -> int:
    messages = screen.messages()
    if debug or env.get(DEBUG_VARIABLE):
        messages.print("".join(traceback.format_exception(failure)), end="")
    reason = " ".join(str(failure).split()) or "no more is known"
    messages.print(
        f"unexpected failure: {type(failure).__name__}: {reason} — "
        f"--debug, or {DEBUG_VARIABLE}=1, shows the details"
    )
    return 1
