"""How does a word on the command line become the command of a verb?

A verb's module is imported only when the verb is called.
"""

from __future__ import annotations

import difflib
from importlib import import_module

import click

from freqid.cli.verbs import INTRODUCTION, VERBS, help_text

__all__ = ["VerbGroup", "freqid_command"]


class VerbGroup(click.Group):
    """A click group that knows its verbs by name and imports one only when it is called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Names in the order of the work."""
        return [verb.name for verb in VERBS]

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """The command of a verb, imported now; None for a name that is no verb."""
        for verb in VERBS:
            if verb.name == cmd_name:
                command: click.Command = import_module(verb.module).command
                return command
        return None

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """As click does, but an unknown verb is answered with the nearest known one."""
        names = self.list_commands(ctx)
        if args and not args[0].startswith("-") and args[0] not in names:
            close = difflib.get_close_matches(args[0].lower(), names, n=1, cutoff=0.5)
            hint = f"did you mean {close[0]!r}?" if close else f"verbs are {', '.join(names)}"
            raise click.UsageError(f"no verb {args[0]!r}; {hint}", ctx)
        return super().resolve_command(ctx, args)

    def get_help(self, ctx: click.Context) -> str:
        """The list of verbs, without importing any."""
        return help_text().rstrip("\n")


freqid_command = VerbGroup(
    name="freqid",
    help=INTRODUCTION,
    subcommand_metavar="VERB FOLDER [OPTIONS]",
    context_settings={"help_option_names": ["--help", "-h"], "max_content_width": 110},
)
