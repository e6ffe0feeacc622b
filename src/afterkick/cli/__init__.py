"""The command line: one thin file a command.

Commands are imported when they run, so that ``--help`` costs nothing.
"""

import sys
from importlib import import_module
from io import TextIOWrapper

import click

from afterkick import __version__

__all__ = ["main"]

_COMMANDS = {
    "new": "Write a commented starter design.",
    "check": "Run the whole road on designs and judge their budgets.",
    "kick": "The impulse response as numbers: analytic, sampled, shipped.",
    "emit": "Write the C.",
    "bench": "Compile the C for its target, run it on an emulated core, compare and count.",
    "targets": "List the target profiles.",
    "tour": "The whole road on the demo designs, for a first look.",
}


class _Lazy(click.Group):
    """A group whose commands live in modules of their own name."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in _COMMANDS:
            return None
        command = import_module(f"afterkick.cli.{cmd_name}").command
        assert isinstance(command, click.Command)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(_COMMANDS.items()))

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and args[0] not in _COMMANDS and not args[0].startswith("-"):
            from difflib import get_close_matches

            near = get_close_matches(args[0], _COMMANDS, n=1)
            hint = f" Did you mean {near[0]}?" if near else ""
            ctx.fail(f"No command {args[0]!r}; there are {', '.join(_COMMANDS)}.{hint}")
        return super().resolve_command(ctx, args)


@click.group(cls=_Lazy, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="afterkick")
def main() -> None:
    """From a continuous-time model to integer C in a sampling interrupt.

    Exit codes: 0 holds, 1 a budget falls short or could not be judged, 2 the input is wrong, 3 this machine lacks
    something.
    """
    if isinstance(sys.stdout, TextIOWrapper):  # a terminal without Greek letters shows a question mark
        sys.stdout.reconfigure(errors="replace")
