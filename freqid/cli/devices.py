"""freqid devices: the sound interfaces of this computer."""

from __future__ import annotations

import click

from freqid.cli.options import json_option
from freqid.cli.output import print_json, print_table, say
from freqid.stages.devices import SoundDevice, list_sound_interfaces

__all__ = ["command"]


@click.command("devices")
@json_option
def command(as_json: bool) -> None:
    """List the sound interfaces with what they can do.

    `freqid capture FOLDER --device` takes a number, a name or a part of a name of this list.

    \b
    Example:
      freqid devices
    """
    found = list_sound_interfaces()
    if as_json:
        print_json({"devices": [device.as_json() for device in found]})
    elif found:
        print_table([_row(device) for device in found],
                    columns=("", "name", "through", "out", "in", "rate Hz", "plays and records"))  # fmt: skip
    else:
        say("No sound interface was found: connect one, or work with the exported profile and `freqid import`.")


def _row(device: SoundDevice) -> tuple[str, ...]:
    return (
        str(device.number),
        device.name,
        device.host,
        str(device.output_channels),
        str(device.input_channels),
        f"{device.sample_rate:g}",
        "yes" if device.full_duplex else "no",
    )
