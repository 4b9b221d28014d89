"""The commands and where each one lives."""

from __future__ import annotations

from importlib import import_module

import click

__all__ = ["polewright"]

COMMANDS = {
    "design": "Design a board, verify it in ngspice and write its pack.",
    "repick": "Choose other values where a pack's are out of stock; write a new pack.",
    "forms": "Compare the realizations for a job; write nothing.",
}


class Commands(click.Group):
    """A group whose commands are loaded when they are called; the list of them needs none."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Names in the order of use."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """The command of that name."""
        if cmd_name not in COMMANDS:
            return None
        command: click.Command = import_module(f"netlist.cli.{cmd_name}").command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """The list of commands in the help."""
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


def _show_version(ctx: click.Context, _: click.Parameter, value: bool) -> None:
    if value and not ctx.resilient_parsing:
        from importlib.metadata import version

        click.echo(f"polewright {version('polewright')}")
        ctx.exit()


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.option(
    "--version",
    is_flag=True,
    is_eager=True,
    expose_value=False,
    callback=_show_version,
    help="Show the version and end.",
)
def polewright() -> None:
    """From a transfer function to an op-amp board that ngspice has verified.

    \b
    Exit codes:
      0   every limit is met
      1   a design was made but misses a limit
      2   the job cannot be read or cannot be realised
      3   the simulator is missing or failed; the pack is marked unverified
      70  a defect in the program
      130 interrupted; 143 terminated; nothing is half-written
    """
