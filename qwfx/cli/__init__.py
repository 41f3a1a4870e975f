"""The command ``qwfx``: one file per verb. Parses and prints, decides nothing.

Verbs are imported when they are called, so that ``qwfx --help`` stays instant.
"""

from __future__ import annotations

import importlib
import os
import sys
from collections.abc import Sequence
from typing import Any

import click

from qwfx._version import __version__
from qwfx.errors import QwfxError
from qwfx.findings import ExitCode

__all__ = ["main"]

# Verb -> what it does; the help of the group is made from this without importing the verbs.
VERBS = {
    "convert": "Turn a PySCF checkpoint, Molden or FCIDUMP file into a .qwfx file, or back.",
    "validate": "Check files: structure, consistency, algebra, witness, digests.",
    "explain": "Print the page of a rule of the validator.",
    "amend": "Put Jastrow terms or determinants into a file.",
    "roundtrip": "Convert and convert back, and compare the orbital values.",
    "show": "What is in a file, at a glance.",
    "diff": "Compare two files member by member.",
    "outline": "Print the tree of a file as JSON, for any JSON Schema implementation.",
    "demo": "Run the main job on small molecules of our own, in under a minute.",
}


class _Verbs(click.Group):
    """A group that knows its verbs by name and imports only the one that is called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(VERBS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in VERBS:
            return None
        command = importlib.import_module(f"qwfx.cli.{cmd_name}").command
        assert isinstance(command, click.Command)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Verbs"):
            formatter.write_dl(list(VERBS.items()))

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        name = args[0] if args else ""
        if name and not name.startswith("-") and name not in VERBS:
            from difflib import get_close_matches

            near = get_close_matches(name, VERBS, n=1)
            hint = f"did you mean {near[0]!r}?" if near else f"the verbs are {', '.join(VERBS)}."
            raise click.UsageError(f"there is no verb {name!r}; {hint}", ctx)
        return super().resolve_command(ctx, args)


@click.group(cls=_Verbs, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, "--version", message="qwfx %(version)s")
def _qwfx() -> None:
    """Portable files for trial wave functions, converted, checked and compared.

    Exit codes: 0 all is well, 1 there are findings or differences, 2 it could not be done.
    """


def print_error(error: QwfxError) -> None:
    """One error, said on standard error: where, found, expected, to do."""
    click.echo(f"qwfx: {error.where + ': ' if error.where else ''}{error.found}", err=True)
    if error.expected:
        click.echo(f"  expected: {error.expected}", err=True)
    if error.remedy:
        click.echo(f"  to do:    {error.remedy}", err=True)


def main(arguments: Sequence[str] | None = None) -> None:
    """Entry point of the console script. Always leaves by SystemExit with a documented exit code."""
    code: Any = ExitCode.OK
    try:
        code = _qwfx.main(
            args=None if arguments is None else list(arguments), prog_name="qwfx", standalone_mode=False
        )
    except click.exceptions.Abort:
        click.echo("qwfx: interrupted; files that were being written are left as they were", err=True)
        code = 130  # 128 + SIGINT, as shells have it
    except click.ClickException as error:
        error.show()
        code = ExitCode.FAILED
    except QwfxError as error:
        print_error(error)
        code = ExitCode.FAILED
    except BrokenPipeError:
        # The reader of our output went away (`qwfx show x | head`): not an error, and nothing more can be said.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    except MemoryError:
        click.echo("qwfx: the memory of this machine does not suffice for this file", err=True)
        code = ExitCode.FAILED
    except Exception as error:
        if os.environ.get("QWFX_TRACEBACK"):
            raise
        click.echo(f"qwfx: a fault of qwfx itself, not of your input: {type(error).__name__}: {error}", err=True)
        click.echo("  to do:    please report it, with the output of the same command under QWFX_TRACEBACK=1", err=True)
        code = ExitCode.FAILED
    sys.exit(int(code or 0))
