"""How a command ends: its exit status, and the one line that says why."""

from __future__ import annotations

import os
import shlex
import sys
import traceback
from collections.abc import Sequence

import click

from wakeledger.core.errors import WakeledgerError

DONE = 0
CHECK_FAILED = 1
INPUT_WRONG = 2
PROGRAM_FAILED = 3
INTERRUPTED = 130


def run(command: click.Command, arguments: Sequence[str]) -> int:
    """Run a command and turn whatever happens into an exit status.

    Parameters
    ----------
    command : click.Command
        The command; its function returns the exit status, and finds the command line as the context's object.
    arguments : sequence of str
        The command line behind the program's name.

    Returns
    -------
    int
        0 done; 1 done, but a check failed; 2 the input is wrong; 3 the program itself failed; 130 interrupted.
    """
    try:
        line = f"wakeledger {shlex.join(arguments)}"
        status = command.main(args=list(arguments), prog_name="wakeledger", standalone_mode=False, obj=line)
        sys.stdout.flush()
    except click.exceptions.NoArgsIsHelpError as error:
        click.echo(error.format_message(), err=True)
        return INPUT_WRONG
    except click.UsageError as error:
        path = error.ctx.command_path if error.ctx else "wakeledger"
        said = error.format_message().rstrip(".")
        say(f"{said} See '{path} --help'" if said.endswith("?") else f"{said}; see '{path} --help'")
        return INPUT_WRONG
    except click.ClickException as error:
        say(error.format_message())
        return INPUT_WRONG
    except click.exceptions.Abort:
        say("interrupted; nothing was written")
        return INTERRUPTED
    except WakeledgerError as error:
        say(str(error))
        return INPUT_WRONG
    except BrokenPipeError:
        # The reader of the output is gone; what is left in the buffer must not raise again at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return DONE
    except Exception as error:
        say(f"the program failed ({type(error).__name__}); {_log(arguments)}")
        return PROGRAM_FAILED
    return status if isinstance(status, int) else DONE


def say(message: str) -> None:
    """Print one line to stderr.

    Parameters
    ----------
    message : str
        What is to be said; line breaks in it become blanks.
    """
    click.echo(f"wakeledger: {' '.join(message.split())}", err=True)


def _log(arguments: Sequence[str]) -> str:
    """Write the log of a failure; says where it is."""
    import platform
    import tempfile
    from importlib.metadata import version

    text = (
        f"wakeledger {version('wakeledger')}, Python {platform.python_version()}, {platform.platform()}\n"
        f"command: wakeledger {shlex.join(arguments)}\n\n{traceback.format_exc()}"
    )
    try:
        handle, name = tempfile.mkstemp(prefix="wakeledger-", suffix=".log")
        with os.fdopen(handle, "w", encoding="utf-8", errors="backslashreplace") as stream:
            stream.write(text)
    except OSError as error:
        return f"no log could be written ({error.strerror or error}): {traceback.format_exc(limit=-1)}"
    return f"the log with the traceback is {name}"
