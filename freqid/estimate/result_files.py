"""How does an estimate get into results/ and back? response.h5, response.csv and model.json.

response.h5 also holds the residual of the fit against time, so that the report needs no second estimate. Phases in
response.csv are as recorded (an unknown clock offset is still in them).
"""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Iterable
from dataclasses import fields
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from excitation.errors import ExcitationError
from excitation.hdf5_file import read_hdf5, write_hdf5
from freqid.capture.clock_map import ClockMap
from freqid.derived import undefined_reasons
from freqid.errors import TestFolderError
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.identification import Identification
from freqid.estimate.model import Adequacy, IdentifiedModel
from freqid.quantity import Caveat, unit_of
from freqid.second_order import PARAMETER_ORDER, SecondOrder
from freqid.test_folder import check_format, write_text

if TYPE_CHECKING:
    from freqid.test_folder import TestFolder

__all__ = ["MODEL_FORMAT", "RESPONSE_FORMAT", "model_as_json", "read_identification", "write_identification"]

MODEL_FORMAT = "freqid model"
RESPONSE_FORMAT = "freqid response"
CSV_HEADER = (
    "frequency_Hz",
    "gain",
    "gain_standard_uncertainty",
    "phase_deg",
    "phase_standard_uncertainty_deg",
    "coherence",
    "input_amplitude_V",
)


def write_identification(folder: TestFolder, found: Identification, *, computed_from: Iterable[Path]) -> None:
    """Write response.h5, response.csv and model.json of the folder, each whole or not at all."""
    sources = list(computed_from)
    _write_response(folder, found, sources)
    write_text(folder.response_csv, _csv(found.response))
    content = folder.provenance(format=MODEL_FORMAT, computed_from=[*sources, folder.response_h5])
    folder.write_json(folder.model, {**content, **model_as_json(found.model)})


def read_identification(folder: TestFolder) -> Identification:
    """The estimate in results/; raises TestFolderError where a file is missing, damaged or newer."""
    content = folder.read_json(folder.model, format=MODEL_FORMAT)
    try:
        model = _model(content)
    except (KeyError, TypeError, ValueError) as error:
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
        "explained": model.explained,
        "undetermined": list(model.undetermined),
        "runs": list(model.runs),
        "settings": model.settings,
        "warnings": [c.as_json() for c in caveats],
    }


def _reasons(model: IdentifiedModel) -> list[Caveat]:
    return undefined_reasons(model.model.vector, model.covariance, degrees_of_freedom=model.degrees_of_freedom)


def _parameter(model: IdentifiedModel, name: str) -> dict[str, Any] | None:
    quantity = model.parameters[name]
    if quantity is None:
        return None
    data = quantity.as_json()
    if name == "delay":
        data["includes_clock_offset"] = not model.clock.offset_known
    return data


def _model(content: dict[str, Any]) -> IdentifiedModel:
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
    model = IdentifiedModel(
        model=fitted,
        covariance=np.array(content["covariance"]),
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
    )
    return model


def _write_response(folder: TestFolder, found: Identification, sources: list[Path]) -> None:
    measured, unit = found.response, found.response.angle_unit

    def stated(name: str) -> str:
        return unit_of(FrequencyResponse, name).replace("angle_unit", unit)

    datasets = {
        name: (np.asarray(getattr(measured, name)), stated(name))
        for name in ("frequency", "variance", "coherence", "noise", "input_amplitude", "degrees_of_freedom")
    }
    datasets["response_real"] = (measured.response.real, stated("response"))
    datasets["response_imaginary"] = (measured.response.imag, stated("response"))
    datasets["record/time"] = (found.time, "s")
    datasets["record/angle"] = (found.angle, unit)
    datasets["record/residual"] = (found.residual, unit)
    provenance = folder.provenance(format=RESPONSE_FORMAT, computed_from=sources)
    attributes = {
        **provenance,
        "computed_from": json.dumps(provenance["computed_from"], ensure_ascii=False),
        "angle_unit": unit,
        "method": measured.method,
        "warnings": json.dumps([c.as_json() for c in measured.caveats], ensure_ascii=False),
    }
    folder.results.mkdir(parents=True, exist_ok=True)
    write_hdf5(folder.response_h5, datasets=datasets, attributes=attributes)


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
        )
    except FileNotFoundError:
        raise folder.missing(path) from None
    except ExcitationError as error:
        raise TestFolderError(str(error)) from None
    except (KeyError, TypeError, ValueError) as error:
        raise TestFolderError(f"{path}: damaged ({error!r}); run `freqid estimate {folder.quoted}` again") from None


def _csv(measured: FrequencyResponse) -> str:
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    unit = measured.angle_unit
    writer.writerow([f"{h}_{unit}_per_V" if h.startswith("gain") else h for h in CSV_HEADER])
    columns = (
        measured.frequency,
        measured.gain,
        measured.gain_uncertainty,
        measured.phase,
        measured.phase_uncertainty,
        measured.coherence,
        measured.input_amplitude,
    )
    writer.writerows([f"{v:.9g}" for v in row] for row in zip(*columns, strict=True))
    return text.getvalue()
