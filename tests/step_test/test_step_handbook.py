"""Handbook step values, read off records as a sensor of 25 to 1000 frames/s would keep them, and from the fit to them.

Each record carries noise of 0.2 % of the step. A reading may differ from the printed value by four of its own standard
uncertainties (chance of one in 16000) and half of the last printed digit; and its uncertainty must be as small as the
sampling allows: that of a local parabola through the frames within ± 0.15 period, with the slope of the response.

Sources: N. S. Nise, *Control Systems Engineering*, ch. 4, table of normalised rise times; K. Ogata, *Modern Control
Engineering* (overshoot, peak time); settling and delay times are the exact ones of the same response.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor
from freqid.quantity import Quantity
from freqid.records import InputStream
from freqid.second_order import SecondOrder
from freqid.step_relations import damping_from_overshoot, normalised_crossing_time
from freqid.step_test.evaluation import evaluate_steps
from freqid.step_test.step_result import StepResult

OMEGA = 2 * math.pi  # natural frequency 1 Hz
NOISE = 0.002  # of the step
# damping ratio: overshoot %, wn tp, wn Tr (10-90 %), wn td (50 %), wn ts (2 %), wn ts (5 %)
PUBLISHED = {
    0.1: (72.925, 3.1574, 1.104, 1.0884, 38.383, 28.968),
    0.3: (37.233, 3.2933, 1.321, 1.1822, 11.230, 10.137),
    0.5: (16.303, 3.6276, 1.638, 1.2940, 8.0763, 5.2891),
    0.7: (4.599, 4.3991, 2.126, 1.4281, 5.9788, 2.8998),
    0.9: (0.1524, 7.2073, 2.883, 1.5880, 4.6996, None),
}
RATES = (25.0, 60.0, 250.0, 1000.0)


def recorded(damping: float, rate: float, *, frequency: float = 1.0, seed: int = 0) -> StepResult:
    """One step of 1 V up after four periods of rest, held for eight, at 1 deg/V."""
    period = 1 / frequency
    count = round(12 * period * 1000)
    time = np.arange(count) / 1000
    drive = InputStream(
        time=time, voltage=(time >= 4 * period - 1e-9).astype(float), hold="zero-order", commanded=True
    )
    rig = SimulatedRig(
        model=SecondOrder(gain=1.0, natural_frequency=frequency, damping_ratio=damping, delay=0.01 * period),
        sensor=SimulatedSensor(sample_rate=rate, exposure=0.0, noise=NOISE, common_clock=True),
    )
    run = rig.run(drive, kind="step", name=f"{damping:g} at {rate:g} Hz", rng=np.random.default_rng(seed))
    return evaluate_steps(run)


def close(quantity: Quantity | None, published: float, half_digit: float) -> None:
    """Within four standard uncertainties and half of the last digit."""
    assert quantity is not None
    assert abs(quantity.value - published) <= 4 * quantity.standard_uncertainty + half_digit


@pytest.mark.parametrize("rate", RATES)
@pytest.mark.parametrize("damping", PUBLISHED)
def test_handbook_values_from_records(damping: float, rate: float) -> None:
    """Overshoot, peak, rise, delay and settling times: by the fit always, read off where the record shows them."""
    overshoot, peak, rise, delay, settled_2, settled_5 = PUBLISHED[damping]
    found = recorded(damping, rate)
    printed = {
        "percent_overshoot": (overshoot, 5e-4),
        "peak_time": (peak / OMEGA, 5e-5 / OMEGA),
        "rise_time_10_90": (rise / OMEGA, 6e-4 / OMEGA),
        "delay_time_50": (delay / OMEGA, 5e-5 / OMEGA),
        "settling_time_2": (settled_2 / OMEGA, 5e-4 / OMEGA),
    }
    if settled_5 is not None:
        printed["settling_time_5"] = (settled_5 / OMEGA, 5e-4 / OMEGA)
    for name, (value, half_digit) in printed.items():
        derived = found.derived[name]
        if name != "peak_time" or derived is not None:  # at 0.9 the interval of the damping ratio may reach 1
            close(derived, value, half_digit)
        read = found.quantities[name]
        if read is not None:
            close(read, value, half_digit)
    for name in ("percent_overshoot", "delay_time_50", "rise_time_10_90"):
        assert found.quantities[name] is not None
    # the level within 1.5 NOISE / sqrt(n), at least 7 frames in the window, and a slope of 0.4 wn or more at 50 %,
    # make 0.5 ms; a quarter of the smoothing's own correction is allowed on top
    read = found.quantities["delay_time_50"]
    assert read is not None
    assert read.standard_uncertainty < 1.5e-3


# Damping of 4.5 Hz geophones from the first two peaks of their step response, and what was published beside them:
# L. Cochrane 2013, seismicnet.com/geophone/lgt45_testing.html
GEOPHONES = [
    (0.1031, 0.0070, 0.650), (0.1112, 0.0069, 0.663), (0.1123, 0.0059, 0.685), (0.1066, 0.0058, 0.680),
    (0.1180, 0.0059, 0.690), (0.1234, 0.0124, 0.590), (0.1362, 0.0123, 0.608), (0.1105, 0.0125, 0.570),
    (0.0944, 0.0039, 0.712), (0.1016, 0.0038, 0.723), (0.0974, 0.0028, 0.749), (0.1075, 0.0027, 0.761),
    (0.1225, 0.0066, 0.681), (0.1012, 0.0075, 0.638),
]  # fmt: skip


@pytest.mark.parametrize(("first", "second", "published"), GEOPHONES)
def test_geophone_damping_from_the_overshoot_of_a_record(first: float, second: float, published: float) -> None:
    """The published damping, as a 4.5 Hz rig recorded at 250 Hz, overshoots by the published ratio of both peaks.

    The peaks are printed to 1e-4, half of which moves their ratio by 5e-5 / second of itself; the damping to 1e-3, half
    of which moves the overshoot by pi / (1 - z^2)^1.5 x 5e-4 of itself. Both ways: the damping read from the overshoot.
    """
    found = recorded(published, 250.0, frequency=4.5).quantities["percent_overshoot"]
    assert found is not None
    ratio = 100 * second / first
    printed = 5e-5 / second + 5e-5 / first + math.pi / (1 - published**2) ** 1.5 * 1e-3
    assert abs(found.value - ratio) <= 4 * found.standard_uncertainty + printed * ratio
    low, high = (float(damping_from_overshoot(found.value + k * 4 * found.standard_uncertainty)) for k in (1, -1))
    assert low - 1e-3 <= published <= (high if math.isfinite(high) else 1.0) + 1e-3


@pytest.mark.parametrize(("overshoot", "damping", "frequency"), [(1.0, 0.8261, 2.224), (1.25, 0.8127, 2.150),
                                                               (1.5, 0.8007, 2.089)])  # fmt: skip
def test_vu_meter(overshoot: float, damping: float, frequency: float) -> None:
    """99 % in 300 ms with 1 to 1.5 % overshoot, its peak at 399 ms: ANSI C16.5-1942, IEC 60268-17, as quoted on the
    linux-audio list 2009; recorded at 250 frames/s. Damping and frequency are printed to four digits: 0.02 % of the
    overshoot per 1e-4 of damping, 1 ms of the times.
    """
    found = recorded(damping, 250.0, frequency=frequency)
    close(found.derived["percent_overshoot"], overshoot, 0.02)
    close(found.quantities["percent_overshoot"], overshoot, 0.02)
    close(found.derived["peak_time"], 0.399, 1e-3)
    fitted = found.model
    reached = float(normalised_crossing_time(fitted.damping_ratio, 0.99)) / (2 * math.pi * fitted.natural_frequency)
    u = 0.3 * math.sqrt(found.covariance[1, 1]) / fitted.natural_frequency + 0.5 * math.sqrt(found.covariance[2, 2])
    assert abs(reached - 0.300) <= 1e-3 + 4 * u


def test_catheter_fast_flush() -> None:
    """Peaks 1.7 mm apart at 25 mm/s, 24 and 17 mm high: 14.7 Hz, ratio 0.71, damping 0.11 (Miller, *Anesthesia*, 6th
    ed., fig. 32-11). The damped frequency is 14.706 Hz, the undamped one 14.794 Hz; damping 0.1091 by half cycles.
    """
    found = recorded(0.1091, 500.0, frequency=14.794)
    decrement = found.quantities["log_decrement"]
    assert decrement is not None
    ratio = math.exp(-decrement.value / 2)
    assert abs(ratio - 17 / 24) <= 4 * ratio * decrement.standard_uncertainty / 2 + 5e-4
    assert found.model.damping_ratio == pytest.approx(0.11, abs=5e-3)
    peak = found.quantities["peak_time"]
    assert peak is not None
    assert abs(1 / (2 * peak.value) - 14.706) <= 4 * peak.standard_uncertainty / (2 * peak.value**2) + 5e-4
