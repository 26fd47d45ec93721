"""One run of a command: where it prints, its progress bar, its exit code, and what an error looks like."""

from __future__ import annotations

import json
import os
import sys
import traceback
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import typer

from vidkin.errors import EXIT_INTERNAL, EXIT_OK, VidkinError

if TYPE_CHECKING:
    from rich.console import Console, RenderableType

SCHEMA = "vidkin-run-1"
#: As a shell reports it: 128 + SIGINT.
EXIT_INTERRUPTED = 130
#: Width of tables where no terminal tells its own [characters].
_WIDTH = 120

_STAGES = {
    "read": "reading the clip",
    "track": "following the runner",
    "fit": "fitting the laws",
    "draw": "drawing tracked.mp4",
}


@dataclass(slots=True)
class Session:
    """What a command fills in: `code`, and for --json the `results`, one record for each thing done."""

    command: str
    as_json: bool
    debug: bool
    code: int = EXIT_OK
    results: list[dict[str, Any]] = field(default_factory=list)

    def say(self, *things: RenderableType) -> None:
        """Print for people, each thing in a paragraph of its own; nothing with --json."""
        if self.as_json:
            return
        console = _console()
        for thing in things:
            console.print(thing, soft_wrap=isinstance(thing, str))
            console.print()

    @contextmanager
    def progress(self) -> Iterator[Callable[[str, int, int | None], None] | None]:
        """A bar that follows the stages of one sheet; None where standard error is no terminal."""
        console = _console(stderr=True)
        if not console.is_terminal:
            yield None
            return
        from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

        columns = (TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
        with Progress(*columns, console=console, transient=True) as bar:
            task = bar.add_task(_STAGES["read"], total=None)
            current = "read"

            def tell(stage: str, done: int, total: int | None) -> None:
                nonlocal current
                if stage != current:
                    current = stage
                    bar.reset(task, description=_STAGES[stage], total=total)
                bar.update(task, completed=done, total=total)

            yield tell

    @contextmanager
    def counter(self, total: int) -> Iterator[Callable[[object], None] | None]:
        """A bar that counts finished sheets; None where standard error is no terminal."""
        console = _console(stderr=True)
        if not console.is_terminal:
            yield None
            return
        from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

        columns = (TextColumn("sheets"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
        with Progress(*columns, console=console, transient=True) as bar:
            task = bar.add_task("sheets", total=total)
            yield lambda _: bar.advance(task)


def _console(*, stderr: bool = False) -> Console:
    from rich.console import Console

    console = Console(stderr=stderr, highlight=False, markup=False, emoji=False)
    if not console.is_terminal and "COLUMNS" not in os.environ:
        console.width = _WIDTH
    return console


@contextmanager
def session(command: str, ctx: typer.Context, *, as_json: bool, debug: bool) -> Iterator[Session]:
    """Run a command's body; then print its JSON, or its error, and leave with its exit code."""
    stated: dict[str, bool] = ctx.obj or {}
    s = Session(
        command=command,
        as_json=as_json or stated.get("as_json", False),
        debug=debug or stated.get("debug", False),
    )
    try:
        yield s
        if s.as_json:
            _print_json(s, {})
        sys.stdout.flush()
    except VidkinError as error:
        s.code = error.exit_code
        complain(s, error.message, error.hint)
    except KeyboardInterrupt:
        s.code = EXIT_INTERRUPTED
        complain(s, "Stopped before the end.", "Nothing half finished was left behind.", traced=False)
    except BrokenPipeError:
        # The reader has gone, as `head` does: nobody is left to be told.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        s.code = EXIT_INTERNAL
    except Exception as error:
        s.code = EXIT_INTERNAL
        hint = "This is a fault of vidkin; run again with --debug and report what it prints."
        complain(s, f"Internal error: {type(error).__name__}: {error}", hint)
    raise typer.Exit(s.code)


def complain(s: Session, message: str, hint: str, *, traced: bool = True) -> None:
    """Say on standard error what happened and what to do, and with --json on standard output too."""
    if s.debug and traced:
        traceback.print_exc(file=sys.stderr)
    if s.as_json:
        s.results.clear()
        _print_json(s, {"error": {"message": message, "hint": hint}})
    lines = [f"Error: {message}", *([hint] if hint else [])]
    typer.echo("\n".join(lines), err=True)


def _print_json(s: Session, more: dict[str, Any]) -> None:
    record = {"schema": SCHEMA, "command": s.command, "exit_code": s.code, "results": s.results, **more}
    typer.echo(json.dumps(record, indent=1, allow_nan=False))
