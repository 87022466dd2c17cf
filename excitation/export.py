"""How does a profile leave the program?

As the same samples three ways, name.h5, name.csv and name.wav, and name.json beside them, which says what was
designed and what it is predicted to do. The samples are rounded once (`excitation.quantisation`); the
same doubles stand in CSV (to the last digit) and HDF5, the same counts in WAV. All four appear together
or not at all.

JSON holds no NaN and no infinity: such a value becomes null, and "warnings" says where.
"""

from __future__ import annotations

import json
import math
import os
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError
from excitation.hdf5_file import file_sha256, write_hdf5
from excitation.profile import Floats, Profile
from excitation.quantisation import CountScale, quantise

__all__ = ["CSV_HEADER", "FORMAT", "FORMAT_VERSION", "ProfileFiles", "write_profile"]

FORMAT, FORMAT_VERSION = "freqid profile", 1
CSV_HEADER = "time_s,voltage_V"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ProfileFiles:
    """The four files, and the profile as they hold it (its samples rounded)."""

    profile: Profile
    hdf5: Path
    csv: Path
    wav: Path
    json: Path


def write_profile(
    profile: Profile,
    folder: Path,
    *,
    full_scale: float,
    name: str = "profile",
    prediction: Mapping[str, Any] | None = None,
    sources: Mapping[str, str] | None = None,
) -> ProfileFiles:
    """Write a profile as HDF5, CSV, WAV and JSON; earlier files of that name are replaced.

    Parameters
    ----------
    full_scale : float
        V at digital full scale of the output.
    name : str
        Of the files, without ending.
    prediction : mapping or None
        What the profile is predicted to do: numbers, text, lists and mappings, written to the JSON file as they are.
    sources : mapping or None
        sha256 by name of each file the design was computed from.

    Raises
    ------
    ExcitationError
        The sample rate is not a whole number of Hz, which WAV needs; or `LimitExceeded`: beyond full scale.
    OSError
        The folder is missing, or the files cannot be written. Nothing is left behind.
    """
    folder = Path(folder)
    rate = profile.sample_rate
    if rate != int(rate):
        raise ExcitationError(
            f"sample_rate: {rate:.10g} Hz; a WAV file needs a whole number, choose {max(1, round(rate))} Hz instead"
        )
    if not folder.is_dir():
        raise FileNotFoundError(f"{folder}: the folder does not exist; create it first")
    counts, scale = quantise(profile, full_scale=full_scale)
    rounded = replace(profile, voltage=scale.voltage_of(counts))
    stamp = _stamp(sources)
    names = {kind: f"{name}.{kind}" for kind in ("h5", "csv", "wav", "json")}
    with tempfile.TemporaryDirectory(prefix=f".{name}-", dir=folder) as staging:
        stage = Path(staging)
        _write_samples(stage, names, rounded, counts)
        write_hdf5(
            stage / names["h5"],
            datasets=_datasets(rounded),
            attributes={**stamp, "design": json.dumps(_finite_terms(_design(rounded, scale, full_scale))[0])},
        )
        hashes = {names[kind]: file_sha256(stage / names[kind]) for kind in ("h5", "csv", "wav")}
        _write_json(stage / names["json"], {**stamp, **_design(rounded, scale, full_scale)}, prediction, hashes)
        for file in names.values():
            os.replace(stage / file, folder / file)
    paths = {kind: folder / file for kind, file in names.items()}
    return ProfileFiles(
        profile=rounded, hdf5=paths["h5"], csv=paths["csv"], wav=paths["wav"], json=paths["json"]
    )


def _datasets(profile: Profile) -> dict[str, tuple[Floats, str]]:
    even, odd = profile.detection_lines
    return {
        "voltage": (profile.voltage, "V"),
        "lines": (profile.lines, "Hz"),
        "even_detection_lines": (even, "Hz"),
        "odd_detection_lines": (odd, "Hz"),
    }


def _finite_terms(value: Any, place: str = "") -> tuple[Any, list[str]]:
    """The value in terms of JSON, and the places where a number was not finite and null stands instead."""
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, np.ndarray):
        value = value.tolist()
    if isinstance(value, float) and not math.isfinite(value):
        return None, [place]
    if isinstance(value, Mapping):
        pairs = {str(key): _finite_terms(item, f"{place}.{key}".lstrip(".")) for key, item in value.items()}
        return {key: item for key, (item, _) in pairs.items()}, [p for _, places in pairs.values() for p in places]
    if isinstance(value, list | tuple):
        items = [_finite_terms(item, f"{place}[{index}]") for index, item in enumerate(value)]
        return [item for item, _ in items], [p for _, places in items for p in places]
    return value, []


def _stamp(sources: Mapping[str, str] | None) -> dict[str, str | int | float | bool]:
    try:
        program_version = version("freqid")
    except PackageNotFoundError:
        program_version = "not installed"
    return {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "freqid_version": program_version,
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "sources": json.dumps(dict(sources or {})),
    }


def _design(profile: Profile, scale: CountScale, full_scale: float) -> dict[str, Any]:
    """Everything that CSV and WAV do not hold, and the figures a reader wants to see."""
    return {
        "kind": profile.kind,
        "hold": profile.hold,
        "sample_rate": profile.sample_rate,
        "n_samples": int(profile.voltage.size),
        "duration": profile.duration,
        "bias": profile.bias,
        "band": profile.band,
        "period_samples": profile.period_samples,
        "steady_start": profile.steady_start,
        "steady_stop": profile.steady_stop,
        "n_periods": profile.n_periods,
        "lines": profile.lines,
        "detection_lines": dict(zip(("even", "odd"), profile.detection_lines, strict=True)),
        "seed": profile.seed,
        "full_scale": full_scale,
        "wav_reference_voltage": scale.reference_voltage,
        "wav_reference_count": scale.reference_count,
        "peak_voltage": profile.peak_voltage,
        "rms_voltage": profile.rms,
        "crest_factor": profile.crest_factor,
        "max_slew_rate": profile.max_slew_rate,
        "settings": dict(profile.settings),
    }


def _write_samples(stage: Path, names: Mapping[str, str], profile: Profile, counts: NDArray[np.int32]) -> None:
    from scipy.io import wavfile

    rows = zip(profile.time.tolist(), profile.voltage.tolist(), strict=True)
    with open(stage / names["csv"], "w", encoding="ascii", newline="\n") as file:
        file.write(CSV_HEADER + "\n")
        file.writelines(f"{time!r},{voltage!r}\n" for time, voltage in rows)
    wavfile.write(stage / names["wav"], int(profile.sample_rate), counts)


def _write_json(
    path: Path, design: Mapping[str, Any], prediction: Mapping[str, Any] | None, hashes: Mapping[str, str]
) -> None:
    content = {**design, "sources": json.loads(design["sources"]), "prediction": prediction or {}, "files": hashes}
    finite, places = _finite_terms(content)
    finite["warnings"] = [
        {"code": "not_finite", "message": f"{place} could not be determined: its value was not finite"}
        for place in places
    ]
    text = json.dumps(finite, indent=1, ensure_ascii=False, allow_nan=False)
    path.write_text(text + "\n", encoding="utf-8", newline="\n")
