"""Which verbs are there, in the order of the work, what does each do, and where is it?

Nothing heavy is imported here, not even the command line's parser: `freqid --help` has to be there at once. A verb's
module is imported only when the verb is called; it offers its command under the name `command`.
"""

from __future__ import annotations

__all__ = ["INTRODUCTION", "VERBS", "Verb", "help_text"]

INTRODUCTION = """\
Frequency-domain test of a rig that turns a voltage into an angle, cross-checked with its step test.

One folder per test: `freqid new FOLDER` makes it, the other verbs fill it in the order below, and
`freqid status FOLDER` says what comes next. Results go to stdout (--json for scripts), everything else to stderr."""

_OPTIONS = (
    ("--version", "Show the version and exit."),
    ("--completion SHELL", "Print what makes bash, zsh or fish complete verbs and options, and exit."),
    ("-h, --help", "Show this message and exit; after a verb: its options and an example."),
)


class Verb:
    """One verb: its name, what it does in one line, and the module of its command."""

    __slots__ = ("does", "module", "name")

    def __init__(self, name: str, does: str, module: str) -> None:
        self.name = name
        self.does = does
        self.module = module


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
    Verb("coefficients", "the transfer function for a controller: continuous, and discrete at its rate",
         "freqid.cli.coefficients"),
    Verb("status", "what is there, what is out of date, and the next command", "freqid.cli.status"),
    Verb("selfcheck", "recomputes the published values in reference_data on this machine", "freqid.cli.selfcheck"),
)  # fmt: skip


def help_text() -> str:
    """What `freqid --help` shows."""
    wide = max(len(verb.name) for verb in VERBS) + 2
    options = max(len(option) for option, _ in _OPTIONS) + 2
    lines = ["Usage: freqid VERB FOLDER [OPTIONS]", "", *INTRODUCTION.splitlines(), "", "Verbs:"]
    lines += [f"  {verb.name:<{wide}}{verb.does}" for verb in VERBS]
    lines += ["", "Options:", *(f"  {option:<{options}}{says}" for option, says in _OPTIONS)]
    lines += ["", "Begin with `freqid rehearse`: the whole job on a simulated vane, in about a minute."]
    return "\n".join(lines) + "\n"
