"""What all commands share: errors become sentences and exit codes; JSON; global options."""

from __future__ import annotations

import sys
import traceback
from typing import TYPE_CHECKING, Any, NoReturn

import typer
from typer.core import TyperGroup

from monitor.commands.exits import ExitCode, ended_by
from monitor.log import printable

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["CommandGroup", "fail", "say", "write_json"]

_GLOBAL = ("--debug", "--log-json")


class CommandGroup(TyperGroup):
    """The top-level group."""

    def parse_args(self, ctx: Any, args: list[str]) -> list[str]:  # noqa: ANN401 - typer hides it
        """Take ``--debug`` and ``--log-json`` wherever they stand before a ``--``."""
        end = args.index("--") if "--" in args else len(args)
        given = [a for a in args[:end] if a in _GLOBAL]
        rest = [a for a in args[:end] if a not in _GLOBAL] + args[end:]
        return super().parse_args(ctx, [*given, *rest])

    def invoke(self, ctx: Any) -> Any:  # noqa: ANN401 - typer's own
        """Run a command; an error ends it with a sentence, never with a traceback."""
        try:
            return super().invoke(ctx)
        except (typer.Exit, typer.Abort, typer.TyperException):
            raise
        except BrokenPipeError:
            # The reader (head, for example) has seen enough; nothing more can be said to it.
            sys.stderr.close()
            raise typer.Exit(ExitCode.OK) from None
        except Exception as error:  # noqa: BLE001 - the last handler there is
            _end(error, debug=bool(ctx.params.get("debug")))


def _end(error: Exception, *, debug: bool) -> NoReturn:
    known = ended_by(error)
    if debug:
        traceback.print_exception(error)
    if known is not None:
        fail(known[1], known[0])
    what = f"{type(error).__name__}: {error}".rstrip(": ")
    fail(
        f"a fault of the program itself: {what}\nRun the same again with --debug for the traceback,"
        " and report it.",
        ExitCode.FAULT,
    )


def fail(sentence: str, code: ExitCode) -> NoReturn:
    """Say what is wrong on stderr and end."""
    say(f"lostwork: {sentence}")
    raise typer.Exit(code)


def say(sentence: str = "") -> None:
    """Say something on stderr: progress, notes, errors."""
    typer.echo(printable(sentence), err=True)


def write_json(content: object) -> None:
    """Write a result to stdout as JSON, whatever numpy put into it; NaN becomes null."""
    import json  # noqa: PLC0415

    typer.echo(json.dumps(_plain(content), indent=2, ensure_ascii=False))


def _plain(value: object) -> object:
    if isinstance(value, dict):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(v) for v in _items(value)]
    if isinstance(value, float):
        return value if value == value and abs(value) != float("inf") else None  # noqa: PLR0124
    if value is None or isinstance(value, (str, int, bool)):
        return value
    item = getattr(value, "item", None)
    return _plain(item()) if callable(item) else str(value)


def _items(value: Sequence[object]) -> Sequence[object]:
    return value
