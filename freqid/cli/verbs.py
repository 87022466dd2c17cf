"""Which verbs are there, in the order of the work, and where is each?

A verb's module is imported only when the verb is called, so that `freqid --help` is quick. Each module
offers its click command under the name `command`.
"""

from __future__ import annotations

import difflib
from dataclasses import dataclass
from importlib import import_module

import click

from freqid import __version__

__all__ = ["VERBS", "Verb", "freqid_command"]


@dataclass(frozen=True, slots=True)
class Verb:
    """One verb: its name, what it does, and the module of its command."""

    name: str
    does: str
    module: str


VERBS = (
    Verb("new", "makes a test folder with a commented rig.toml", "freqid.cli.new"),
    Verb("rehearse", "the whole job on the simulated rig: the dry run before the real one", "freqid.cli.rehearse"),
    Verb("excite", "designs the voltage profile, says what it will do and how well it will measure",
         "freqid.cli.excite"),
    Verb("devices", "lists the sound interfaces with what they can do", "freqid.cli.devices"),
    Verb("capture", "plays the profile and records both channels, or simulates it", "freqid.cli.capture"),
    Verb("import", "brings in logs made elsewhere: one file or two, CSV, WAV or HDF5", "freqid.cli.import_logs"),
    Verb("estimate", "clock map, frequency response, model", "freqid.cli.estimate"),
    Verb("steptest", "step-test values and step model", "freqid.cli.steptest"),
    Verb("crosscheck", "the comparison, the verdict, causes, the next test", "freqid.cli.crosscheck"),
    Verb("report", "one self-contained HTML page with the figures", "freqid.cli.report"),
    Verb("selfcheck", "recomputes the published values in reference_data on this machine", "freqid.cli.selfcheck"),
)  # fmt: skip


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

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """The list of verbs, without importing any."""
        with formatter.section("Verbs"):
            formatter.write_dl([(verb.name, verb.does) for verb in VERBS])


@click.group(
    cls=VerbGroup,
    subcommand_metavar="VERB FOLDER [OPTIONS]",
    context_settings={"help_option_names": ["--help", "-h"], "max_content_width": 110},
)
@click.version_option(__version__, message="%(prog)s %(version)s")
def freqid_command() -> None:
    """Frequency-domain test of a rig that turns a voltage into an angle, cross-checked with its step test.

    One folder per test: `freqid new FOLDER` makes it, the other verbs fill it in the order below.
    Results go to stdout (--json for scripts), everything else to stderr.
    """
