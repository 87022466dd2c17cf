"""How does an estimate get into results/ and back? response.h5, response.csv and model.json.

response.h5 also holds the residual of the fit against time, so that the report needs no second estimate, and the
distortion at the lines without voltage. Phases in response.csv are as recorded (an unknown clock offset is still in
them); its distortion is that of the neighbouring detection lines, between which powers are joined by straight lines. A
column of which nothing is known is left out.
"""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Iterable, Mapping
from dataclasses import fields
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from excitation.errors import ExcitationError
from excitation.hdf5_file import file_sha256, read_hdf5, write_hdf5
from freqid.capture.clock_map import ClockMap
from freqid.derived import undefined_reasons
from freqid.errors import TestFolderError
from freqid.estimate.amplitude_dependence import AmplitudeDependence
from freqid.estimate.distortion import EVEN, ODD, DistortionLevels
from freqid.estimate.distortion_summary import DistortionSummary
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.identification import Identification
from freqid.estimate.measured_amplitude import MeasuredAmplitude
from freqid.estimate.model import Adequacy, IdentifiedModel
from freqid.quantity import Caveat
from freqid.second_order import PARAMETER_ORDER, SecondOrder
from freqid.test_folder import check_format, write_text

if TYPE_CHECKING:
    from freqid.test_folder import TestFolder

__all__ = ["MODEL_FORMAT", "RESPONSE_FORMAT", "model_as_json", "read_identification", "write_identification"]

MODEL_FORMAT = "freqid model"
RESPONSE_FORMAT = "freqid response"
DISTORTION = "distortion/"


def write_identification(
    folder: TestFolder, found: Identification, *, computed_from: Iterable[Path] | Mapping[Path, str | None]
) -> None:
    """Write response.h5, response.csv and model.json of the folder, each whole or not at all.

    `computed_from` names the runs, with their sha256 where it is known (a large file takes long to hash).
    """
    known = computed_from if isinstance(computed_from, Mapping) else {}
    sources = {path: known.get(path) or file_sha256(path) for path in computed_from}
    _write_response(folder, found, sources)
    write_text(folder.response_csv, _csv(found))
    content = folder.provenance(format=MODEL_FORMAT, computed_from={**sources, folder.response_h5: None})
    folder.write_json(folder.model, {**content, **model_as_json(found.model)})


def read_identification(folder: TestFolder) -> Identification:
    """The estimate in results/; raises TestFolderError where a file is missing, damaged or newer."""
    content = folder.read_json(folder.model, format=MODEL_FORMAT)
    try:
        model = _model(content)
    except (LookupError, ArithmeticError, AttributeError, TypeError, ValueError) as error:
        raise TestFolderError(f"{folder.model}: damaged ({error!r}); run `freqid estimate {folder.quoted}` "
                              f"again") from None
    return _read_response(folder, model)


def model_as_json(model: IdentifiedModel) -> dict[str, Any]:
    """The body of results/model.json; what is undetermined is null, with a warning that says why."""
    caveats = [*model.caveats, *_reasons(model)]
    tested = math.isfinite(model.adequacy.p_value)
    if not tested:
        caveats.append(Caveat("adequacy_untested", "Too few independent points to test whether the model is adequate."))
    numerator, denominator = model.model.coefficients()
    return {
        "angle_unit": model.angle_unit,
        "parameters": {name: _parameter(model, name) for name in PARAMETER_ORDER},
        "parameter_order": list(PARAMETER_ORDER),
        "covariance": model.covariance,
        "degrees_of_freedom": model.degrees_of_freedom,
        "derived": {name: None if q is None else q.as_json() for name, q in model.derived.items()},
        "transfer_function": {"numerator": numerator, "denominator": denominator, "delay": model.model.delay},
        "adequate": model.adequacy.adequate if tested else None,
        "adequacy": {
            "statistic": model.adequacy.statistic if tested else None,
            "degrees_of_freedom": model.adequacy.degrees_of_freedom,
            "p_value": model.adequacy.p_value if tested else None,
            "better_structure": model.adequacy.better_structure,
        },
        "clock": model.clock.as_json(),
        "amplitude": _amplitude(model),
        "distortion": [one.as_json() for one in model.distortion],
        "explained": model.explained,
        "undetermined": list(model.undetermined),
        "runs": list(model.runs),
        "settings": model.settings,
        "warnings": [c.as_json() for c in caveats],
    }


def _reasons(model: IdentifiedModel) -> list[Caveat]:
    return undefined_reasons(model.model.vector, model.covariance, degrees_of_freedom=model.degrees_of_freedom)


def _amplitude(model: IdentifiedModel) -> dict[str, Any] | None:
    if model.amplitude is None:
        return None
    dependence = None if model.dependence is None else model.dependence.as_json()
    return {**model.amplitude.as_json(), "angle_unit": model.angle_unit, "dependence": dependence}


def _parameter(model: IdentifiedModel, name: str) -> dict[str, Any] | None:
    quantity = model.parameters[name]
    if quantity is None:
        return None
    data = quantity.as_json()
    if name == "delay":
        data["includes_clock_offset"] = not model.clock.offset_known
    return data


def _model(content: dict[str, Any]) -> IdentifiedModel:
    if content["angle_unit"] not in ("deg", "rad"):
        raise ValueError(f"angle_unit is {content['angle_unit']!r}")
    adequacy = content["adequacy"]
    tf = content["transfer_function"]
    wn2 = tf["denominator"][2]
    fitted = SecondOrder(
        gain=tf["numerator"][0] / wn2,
        natural_frequency=math.sqrt(wn2) / (2 * math.pi),
        damping_ratio=tf["denominator"][1] / (2 * math.sqrt(wn2)),
        delay=tf["delay"],
    )

    def number(value: float | None) -> float:
        return math.nan if value is None else value

    caveats = Caveat.all_from_json(content["warnings"])
    amplitude = content.get("amplitude")  # files of the first days hold neither
    dependence = None if amplitude is None else amplitude["dependence"]
    model = IdentifiedModel(
        model=fitted,
        covariance=np.array(content["covariance"], dtype=float).reshape(4, 4),
        degrees_of_freedom=content["degrees_of_freedom"],
        angle_unit=content["angle_unit"],
        adequacy=Adequacy(
            statistic=number(adequacy["statistic"]),
            degrees_of_freedom=adequacy["degrees_of_freedom"],
            p_value=number(adequacy["p_value"]),
            better_structure=adequacy["better_structure"],
        ),
        clock=ClockMap.from_json(content["clock"]),
        explained=content["explained"],
        caveats=caveats,
        undetermined=tuple(content["undetermined"]),
        runs=tuple(content["runs"]),
        settings=content["settings"],
        amplitude=None if amplitude is None else MeasuredAmplitude.from_json(amplitude),
        dependence=None if dependence is None else AmplitudeDependence.from_json(dependence),
        distortion=tuple(DistortionSummary.from_json(row) for row in content.get("distortion", [])),
    )
    return model


def _write_response(folder: TestFolder, found: Identification, sources: Mapping[Path, str | None]) -> None:
    unit = found.response.angle_unit
    measured = _arrays(found.response, "", unit)
    distortion = {} if found.distortion is None else _arrays(found.distortion, DISTORTION, unit)
    record = {"record/time": (found.time, "s"), "record/angle": (found.angle, unit)}
    record["record/residual"] = (found.residual, unit)
    datasets = {**measured, **distortion, **record}
    provenance = folder.provenance(format=RESPONSE_FORMAT, computed_from=sources)
    attributes = {
        **provenance,
        "computed_from": json.dumps(provenance["computed_from"], ensure_ascii=False),
        "angle_unit": unit,
        "method": found.response.method,
        "warnings": json.dumps([c.as_json() for c in found.response.caveats], ensure_ascii=False),
    }
    folder.results.mkdir(parents=True, exist_ok=True)
    write_hdf5(folder.response_h5, datasets=datasets, attributes=attributes)


def _arrays(owner: FrequencyResponse | DistortionLevels, group: str, unit: str) -> dict[str, tuple[Any, str]]:
    """Each array of a value object with its unit, real and imaginary part apart."""
    arrays: dict[str, tuple[Any, str]] = {}
    for one in fields(owner):
        value = getattr(owner, one.name)
        if "unit" not in one.metadata or value is None:
            continue
        stated = one.metadata["unit"].replace("angle_unit", unit)
        if np.iscomplexobj(value):
            arrays[f"{group}{one.name}_real"] = (value.real, stated)
            arrays[f"{group}{one.name}_imaginary"] = (value.imag, stated)
        else:
            arrays[f"{group}{one.name}"] = (np.asarray(value), stated)
    return arrays


def _distortion(datasets: dict[str, Any]) -> DistortionLevels | None:
    if f"{DISTORTION}frequency" not in datasets:
        return None
    return DistortionLevels(**{one.name: datasets[f"{DISTORTION}{one.name}"] for one in fields(DistortionLevels)})


def _read_response(folder: TestFolder, model: IdentifiedModel) -> Identification:
    path = folder.response_h5
    try:
        content = read_hdf5(path)
        check_format(path, content.attributes, format=RESPONSE_FORMAT, version=1)
        d = content.datasets
        stored = {f.name for f in fields(FrequencyResponse)} & d.keys()
        response = FrequencyResponse(
            **{name: d[name] for name in stored},
            response=d["response_real"] + 1j * d["response_imaginary"],
            angle_unit=content.attributes["angle_unit"],
            method=content.attributes["method"],
            caveats=Caveat.all_from_json(json.loads(content.attributes["warnings"])),
        )
        return Identification(
            response=response,
            model=model,
            time=d["record/time"],
            residual=d["record/residual"],
            angle=d["record/angle"],
            distortion=_distortion(d),
        )
    except FileNotFoundError:
        raise folder.missing(path) from None
    except ExcitationError as error:
        raise TestFolderError(str(error)) from None
    except (KeyError, TypeError, ValueError) as error:
        raise TestFolderError(f"{path}: damaged ({error!r}); run `freqid estimate {folder.quoted}` again") from None


def _csv(found: Identification) -> str:
    measured, levels = found.response, found.distortion
    unit = measured.angle_unit
    columns = {
        "frequency_Hz": measured.frequency,
        f"gain_{unit}_per_V": measured.gain,
        f"gain_standard_uncertainty_{unit}_per_V": measured.gain_uncertainty,
        "phase_deg": measured.phase,
        "phase_standard_uncertainty_deg": measured.phase_uncertainty,
        "coherence": measured.coherence,
        "input_amplitude_V": measured.input_amplitude,
        f"noise_{unit}": measured.noise,
        f"nonlinear_{unit}": measured.nonlinear,
        f"even_distortion_{unit}": None if levels is None else levels.at(measured.frequency, EVEN),
        f"odd_distortion_{unit}": None if levels is None else levels.at(measured.frequency, ODD),
    }
    known = {name: column for name, column in columns.items() if column is not None and np.all(np.isfinite(column))}
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(known)
    writer.writerows([f"{v:.9g}" for v in row] for row in zip(*known.values(), strict=True))
    return text.getvalue()
