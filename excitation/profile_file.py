"""Which profile does a file hold?

HDF5 tells everything by itself. CSV and WAV hold the samples alone; what was designed stands in the JSON file
of the same name beside them. Without it a bare profile comes back: kind "other", held, about its
first sample, no period. A WAV file without its JSON file does not say what full scale means in V either.
"""

from __future__ import annotations

import json
import struct
import warnings
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from excitation.errors import ExcitationError
from excitation.export import CSV_HEADER, FORMAT, FORMAT_VERSION
from excitation.hdf5_file import read_hdf5
from excitation.profile import Floats, Profile
from excitation.quantisation import CountScale

__all__ = ["read_profile"]


def read_profile(path: Path, *, full_scale: float | None = None) -> Profile:
    """Read a profile from its .h5, .csv or .wav file.

    Parameters
    ----------
    full_scale : float or None
        V at digital full scale, for a WAV file without a JSON file beside it.

    Raises
    ------
    ExcitationError
        The file is damaged, of another kind, or does not fit the JSON file beside it.
    FileNotFoundError
        There is no such file.
    """
    path = Path(path)
    if not path.is_file():
        raise FileNotFoundError(f"{path}: there is no such file; write the profile first")
    ending = path.suffix.lower()
    if ending == ".h5":
        return _from_hdf5(path)
    if ending not in (".csv", ".wav"):
        raise ExcitationError(f"{path}: the ending {ending!r} is none of .h5, .csv, .wav")
    design = _design_beside(path)
    voltage, rate = _read_csv(path) if ending == ".csv" else _read_wav(path, design, full_scale)
    if design is None:
        return Profile(voltage=voltage, sample_rate=rate, hold="zero-order", bias=float(voltage[0]), kind="other")
    return _profile(path, voltage, design)


def _from_hdf5(path: Path) -> Profile:
    content = read_hdf5(path)
    if "voltage" not in content.datasets or "design" not in content.attributes:
        raise ExcitationError(f"{path}: an HDF5 file, but not of a profile (no dataset 'voltage' or no 'design')")
    _check_format(path, content.attributes)
    return _profile(path, content.datasets["voltage"], _parsed(path, str(content.attributes["design"])))


def _design_beside(path: Path) -> dict[str, Any] | None:
    beside = path.with_suffix(".json")
    if not beside.is_file():
        return None
    try:
        text = beside.read_text(encoding="utf-8")
    except UnicodeDecodeError as fault:
        raise ExcitationError(f"{beside}: not a text in UTF-8; write the profile again") from fault
    design = _parsed(beside, text)
    _check_format(beside, design)
    return design


def _parsed(path: Path, text: str) -> dict[str, Any]:
    try:
        design = json.loads(text)
    except json.JSONDecodeError as fault:
        place = f"line {fault.lineno}, column {fault.colno}"
        raise ExcitationError(f"{path}: damaged at {place}; write the profile again") from fault
    if not isinstance(design, dict):
        raise ExcitationError(f"{path}: does not describe a profile; write it again")
    return design


def _check_format(path: Path, stamp: Mapping[str, Any]) -> None:
    if stamp.get("format") != FORMAT:
        raise ExcitationError(f"{path}: its format is {stamp.get('format')!r}, not {FORMAT!r}; give another file")
    if stamp.get("format_version") != FORMAT_VERSION:
        raise ExcitationError(
            f"{path}: format version {stamp.get('format_version')}, this program reads {FORMAT_VERSION}; write it again"
        )


def _profile(path: Path, voltage: Floats, design: Mapping[str, Any]) -> Profile:
    try:
        if voltage.size != design["n_samples"]:
            raise ExcitationError(
                f"{path}: {voltage.size} samples, {design['n_samples']} were designed; write the profile again"
            )
        return Profile(
            voltage=voltage,
            sample_rate=design["sample_rate"],
            hold=design["hold"],
            bias=design["bias"],
            kind=design["kind"],
            period_samples=design["period_samples"],
            lines=np.array(design["lines"], dtype=np.float64),
            steady_start=design["steady_start"],
            steady_stop=design["steady_stop"],
            seed=design["seed"],
            band=None if design["band"] is None else (design["band"][0], design["band"][1]),
            settings=design["settings"],
        )
    except KeyError as fault:
        raise ExcitationError(f"{path}: the design does not say {fault}; write the profile again") from fault
    except TypeError as fault:
        raise ExcitationError(f"{path}: the design is damaged ({fault}); write the profile again") from fault


def _read_csv(path: Path) -> tuple[Floats, float]:
    """Samples (M,) and sample rate in Hz."""
    try:
        with open(path, encoding="utf-8-sig") as file:
            header = file.readline().strip()
            if header != CSV_HEADER:
                raise ExcitationError(f"{path}: line 1 is {header[:60]!r}, a profile starts with {CSV_HEADER!r}")
            rows = np.loadtxt(file, delimiter=",", ndmin=2, dtype=np.float64)
    except ExcitationError:
        raise
    except ValueError as fault:
        raise ExcitationError(f"{path}: not a table of two columns of numbers ({fault})") from fault
    if rows.ndim != 2 or rows.shape[0] < 2 or rows.shape[1] != 2:
        raise ExcitationError(f"{path}: {rows.shape[0]} rows, {rows.shape[-1]} columns; a profile has 2 or more of 2")
    return np.ascontiguousarray(rows[:, 1]), _rate_of(path, rows[:, 0])


def _rate_of(path: Path, time: Floats) -> float:
    steps = np.diff(time)
    mean = (time[-1] - time[0]) / steps.size
    if not mean > 0 or np.max(np.abs(steps - mean)) > 0.01 * mean:
        raise ExcitationError(f"{path}: the times are not evenly spaced; a profile has one sample rate")
    rate = 1 / float(mean)
    return float(round(rate)) if abs(rate - round(rate)) < 1e-6 * rate else rate


def _read_wav(path: Path, design: Mapping[str, Any] | None, full_scale: float | None) -> tuple[Floats, float]:
    """Samples (M,) and sample rate in Hz."""
    from scipy.io import wavfile

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error", wavfile.WavFileWarning)  # a file cut short is only warned of otherwise
            rate, counts = wavfile.read(path)
    except (ValueError, EOFError, OSError, struct.error, UnboundLocalError, wavfile.WavFileWarning) as fault:
        raise ExcitationError(f"{path}: not a readable WAV file ({fault}); write the profile again") from fault
    if counts.ndim != 1 or counts.dtype != np.int32:
        raise ExcitationError(f"{path}: {counts.dtype} of shape {counts.shape}; a profile has one channel of int32")
    return _scale(path, design, full_scale).voltage_of(counts), float(rate)


def _scale(path: Path, design: Mapping[str, Any] | None, full_scale: float | None) -> CountScale:
    if design is not None and {"wav_reference_voltage", "wav_reference_count"} <= design.keys():
        return CountScale(
            reference_voltage=design["wav_reference_voltage"], reference_count=design["wav_reference_count"]
        )
    if full_scale is None:
        raise ExcitationError(f"{path}: no JSON file beside it says what full scale is in V; give full_scale")
    return CountScale.of(full_scale=full_scale, bias=0.0)
