"""How does the model leave for a controller? As coefficients with uncertainty, continuous and at the controller's rate.

The uncertainties are those of the four parameters carried through (first order, JCGM 100:2008, 5.2); the coefficients
are strongly correlated, so an interval of anything computed from them comes from the parameters' covariance in
results/model.json instead.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from freqid.discrete_model import DiscreteModel, held_equivalent
from freqid.errors import EstimationError
from freqid.estimate.model import IdentifiedModel
from freqid.estimate.result_files import read_identification
from freqid.quantity import Caveat, Quantity
from freqid.second_order import SecondOrder
from freqid.step_test.result_file import read_step_result
from freqid.step_test.step_result import StepResult
from freqid.test_folder import TestFolder, write_text

__all__ = ["Coefficients", "Test", "coefficients_of_folder"]

Test = Literal["frequency", "step"]
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Coefficients:
    """The model in powers of s, and where a rate was given in powers of 1/z; each list highest power of s first.

    `delay` in s is the one in the model; `discrete` is None where no rate was asked for.
    """

    test: Test
    angle_unit: str
    numerator: tuple[Quantity, ...]
    denominator: tuple[Quantity, ...]
    delay: float
    discrete: DiscreteModel | None
    discrete_numerator: tuple[Quantity, ...]
    discrete_denominator: tuple[Quantity, ...]
    caveats: tuple[Caveat, ...]

    def as_json(self) -> dict[str, Any]:
        """The body of results/coefficients.json."""

        def plain(quantities: tuple[Quantity, ...]) -> dict[str, list[float]]:
            return {
                "value": [q.value for q in quantities],
                "standard_uncertainty": [q.standard_uncertainty for q in quantities],
            }

        found = self.discrete
        return {
            "test": self.test,
            "angle_unit": self.angle_unit,
            "continuous": {
                "numerator": plain(self.numerator), "denominator": plain(self.denominator), "delay": self.delay,
            },
            "discrete": None if found is None else {
                "sample_rate": found.sample_rate,
                "hold": "zero-order",
                "delay_samples": found.delay_samples,
                "numerator": plain(self.discrete_numerator),
                "denominator": plain(self.discrete_denominator),
            },
            "warnings": [caveat.as_json() for caveat in self.caveats],
        }  # fmt: skip

    def rows(self) -> list[tuple[str, str, Quantity]]:
        """(form, power, quantity) for a table: "s^2" and so on, then "z^-1" with the whole delay in the power."""
        late = 0 if self.discrete is None else self.discrete.delay_samples
        count = len(self.denominator) - 1
        rows = [("numerator", "s^0", q) for q in self.numerator]
        rows += [("denominator", f"s^{count - n}", q) for n, q in enumerate(self.denominator)]
        rows += [("numerator", f"z^-{late + n}", q) for n, q in enumerate(self.discrete_numerator)]
        rows += [("denominator", f"z^-{n}", q) for n, q in enumerate(self.discrete_denominator)]
        return rows


def coefficients_of_folder(
    folder: TestFolder, *, test: Test = "frequency", controller_rate: float | None = None, delay: float | None = None
) -> Coefficients:
    """Coefficients of the model in `folder`, written to results/coefficients.json and .csv.

    Parameters
    ----------
    test
        Whose model: the frequency test's, or that of the step test.
    controller_rate
        Rate of the controller in Hz; None: the continuous form only.
    delay
        Delay of the rig in s, where it is known better than the test knows it.

    Raises
    ------
    TestFolderError
        There is no such result yet.
    EstimationError
        The rate or the delay is impossible.
    """
    caveats: tuple[Caveat, ...] = ()
    found: IdentifiedModel | StepResult
    if test == "frequency":
        found, source = read_identification(folder).model, folder.model
        caveats = tuple(caveat for caveat in found.caveats if caveat.code == "model_inadequate")
    else:
        found, source = read_step_result(folder), folder.step
    model = found.model
    known = np.array(found.covariance, dtype=float)
    if delay is not None or not found.clock.offset_known or "delay" in found.undetermined:
        caveats += () if delay is not None else (_no_delay(found.clock.offset_known),)
        model = replace(model, delay=0.0 if delay is None else delay)
        known[3, :] = known[:, 3] = 0.0
    try:
        result = _coefficients(model, known, freedom=found.degrees_of_freedom, rate=controller_rate)
    except ValueError as error:
        raise EstimationError(f"{error}; give --controller-rate in Hz and --delay in s, both from the rig") from None
    result = replace(result, test=test, angle_unit=found.angle_unit, caveats=caveats)
    content = folder.provenance(format="freqid coefficients", computed_from=[source])
    folder.write_json(folder.results / "coefficients.json", {**content, **result.as_json()})
    write_text(folder.results / "coefficients.csv", _csv(result))
    return result


def _no_delay(offset_known: bool) -> Caveat:
    why = "is undetermined" if offset_known else "contains the unknown offset between the clocks"
    return Caveat("delay_left_out", f"The delay {why}: the coefficients are without it; give the rig's with --delay.")


def _coefficients(model: SecondOrder, covariance: Floats, *, freedom: float, rate: float | None) -> Coefficients:
    def listed(function: Callable[[SecondOrder], Floats], unit: str) -> tuple[Quantity, ...]:
        return _propagated(function, model, covariance, freedom=freedom, unit=unit)

    found = None if rate is None else held_equivalent(model, sample_rate=rate)

    def discrete(of: SecondOrder) -> DiscreteModel:
        assert found is not None
        return held_equivalent(of, sample_rate=found.sample_rate, delay_samples=found.delay_samples)

    return Coefficients(
        test="frequency",
        angle_unit="",
        numerator=listed(lambda m: np.array(m.coefficients()[0]), "1"),
        denominator=listed(lambda m: np.array(m.coefficients()[1]), "1"),
        delay=model.delay,
        discrete=found,
        discrete_numerator=() if found is None else listed(lambda m: discrete(m).numerator, "1"),
        discrete_denominator=() if found is None else listed(lambda m: discrete(m).denominator, "1"),
        caveats=(),
    )


def _propagated(
    function: Callable[[SecondOrder], Floats], model: SecondOrder, covariance: Floats, *, freedom: float, unit: str
) -> tuple[Quantity, ...]:
    """Values of `function` with standard uncertainties from central differences over a tenth of each uncertainty."""
    value, vector = function(model), model.vector
    columns = []
    for n, step in enumerate(np.sqrt(np.diag(covariance)) / 10):
        ahead, behind = vector.copy(), vector.copy()
        ahead[n] += step
        behind[n] -= step if n != 3 else min(step, vector[3])  # a delay stays at least zero
        width = ahead[n] - behind[n]
        columns.append(np.zeros_like(value) if width == 0 else
                       (function(SecondOrder.from_vector(ahead)) - function(SecondOrder.from_vector(behind))) / width)
    slopes = np.stack(columns, axis=-1)
    deviation = np.sqrt(np.maximum(np.einsum("ij,jk,ik->i", slopes, covariance, slopes), 0.0))
    return tuple(Quantity.normal(v, unit, u, freedom) for v, u in zip(value, deviation, strict=True))


def _csv(result: Coefficients) -> str:
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(("part", "power", "value", "standard_uncertainty"))
    for part, power, quantity in result.rows():
        writer.writerow((part, power, repr(quantity.value), repr(quantity.standard_uncertainty)))
    writer.writerow(("delay_s", "", repr(float(result.delay)), ""))
    if result.discrete is not None:
        writer.writerow(("sample_rate_Hz", "", repr(float(result.discrete.sample_rate)), ""))
    return buffer.getvalue()
