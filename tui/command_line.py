"""What the commands share: refusals in one sentence, JSON, progress, campaign folders."""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Callable
from functools import wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any, ParamSpec

import click

if TYPE_CHECKING:
    from reduce.campaign.door import Campaign

P = ParamSpec("P")

EXIT_UNREADABLE = 1
EXIT_USAGE = 2
FOLDER = click.Path(path_type=Path, file_okay=False)
FILE = click.Path(path_type=Path)


class OneSentence(click.ClickException):
    """A refusal the user can act on; exit code 2."""

    exit_code = EXIT_USAGE

    def show(self, file: Any = None) -> None:
        """Print the sentence alone, without a usage block."""
        click.echo(f"fadeline: {self.format_message()}", err=True)


def plainly(command: Callable[P, None]) -> Callable[P, None]:
    """Turn the project's own errors into one sentence; leave the traceback in the log file."""

    @wraps(command)
    def run(*args: P.args, **kwargs: P.kwargs) -> None:
        from reduce.plain_text import PlainError

        try:
            command(*args, **kwargs)
        except BrokenPipeError:
            sys.stderr.close()  # the reader of our output has gone: nothing is wrong
        except PlainError as error:
            raise OneSentence(str(error)) from error
        except OSError as error:
            raise OneSentence(f"{error.filename or 'A file'}: {(error.strerror or str(error)).lower()}.") from error

    return run


def print_json(value: Any) -> None:
    """One line of JSON on stdout."""
    text = json.dumps(value, allow_nan=False, ensure_ascii=False)
    click.echo(text.encode("utf-8", "replace").decode())  # a file name need not be text; JSON must be


def open_campaign(folder: Path) -> Campaign:
    """The campaign of a folder; refuses with one sentence."""
    from reduce.campaign.door import Campaign

    return Campaign.open(folder)


class Progress:
    """One line on stderr, overwritten in place; where that is no terminal, a line every few seconds."""

    every_s = 5.0

    def __init__(self) -> None:
        self._last = 0.0

    def __call__(self, text: str) -> None:
        """Show a line; "" clears it."""
        now = time.monotonic()
        if sys.stderr.isatty():
            click.echo(f"\r\x1b[K{text}", err=True, nl=False)
        elif text and now - self._last >= self.every_s:
            self._last = now
            click.echo(text, err=True)


progress = Progress()
