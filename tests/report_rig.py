"""Results of one vane to draw in tests, made from a known model and seeded noise without running the estimators."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from freqid.capture.clock_map import ClockMap
from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor
from freqid.crosscheck.comparison_result import Cause, ComparedRow, CrossCheck, JointTest, NextTest, RowVerdict
from freqid.crosscheck.exhibit import Exhibit, Series
from freqid.crosscheck.requirements import RequirementRow
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.identification import Identification
from freqid.estimate.model import Adequacy, IdentifiedModel
from freqid.quantity import Caveat, Quantity
from freqid.records import InputStream, Origin, Periodicity, Run
from freqid.report import ReportInputs
from freqid.rig import Rig
from freqid.rig_template import built_in_vane
from freqid.second_order import SecondOrder
from freqid.step_test.step_result import STEP_QUANTITIES, StepReading, StepResult

VANE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
OVERDAMPED = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=2.2, delay=0.02)
CLOCK_OFFSET = 0.35
STEP_TIMES = (1.0, 3.5, 6.0)


def quantity(value: float, unit: str = "1", u: float = 0.01) -> Quantity:
    """A quantity with a normal interval."""
    return Quantity.normal(value, unit, u)


def clock_map(*, offset_known: bool = False) -> ClockMap:
    """A clock 150 ppm slow with two gaps."""
    lag = VANE.delay - (0.0 if offset_known else CLOCK_OFFSET)
    return ClockMap(
        ratio_ppm=quantity(0.0 if offset_known else 150.0, "ppm", 2.0),
        offset_known=offset_known,
        lag=quantity(lag, "s", 1e-4),
        lost_frames=3,
        lost_at=np.array([1.0, 2.0]),
        frame_interval=1 / 60,
        jitter=1e-3,
        frames=477,
    )


def covariance() -> np.ndarray:
    """A joint covariance with correlations, in the order gain, natural frequency, damping ratio, delay."""
    deviations = np.array([0.05, 0.004, 0.001, 1e-4])
    correlation = np.eye(4)
    correlation[0, 2] = correlation[2, 0] = 0.7
    return np.outer(deviations, deviations) * correlation


def identification(
    model: SecondOrder = VANE, *, n_lines: int = 40, offset_known: bool = False, caveats: Sequence[Caveat] = (),
    seed: int = 1,
) -> Identification:  # fmt: skip
    """Lines of the model with circular noise of known variance."""
    rng = np.random.default_rng(seed)
    clock = clock_map(offset_known=offset_known)
    shown = replace(model, delay=clock.lag.value)
    frequency = np.geomspace(0.3, 12, n_lines) if n_lines > 1 else np.array([2.0])
    deviation = 0.03 * np.ones(len(frequency))
    noise = deviation * (rng.standard_normal(len(frequency)) + 1j * rng.standard_normal(len(frequency))) / np.sqrt(2)
    response = FrequencyResponse(
        frequency=frequency,
        response=shown.response(frequency) + noise,
        variance=deviation**2,
        coherence=np.full(len(frequency), 0.99),
        noise=np.full(len(frequency), 0.01),
        input_amplitude=np.full(len(frequency), 0.3),
        degrees_of_freedom=np.full(len(frequency), 20.0),
        angle_unit="deg",
        method="periodic",
    )
    found = IdentifiedModel(
        model=shown,
        covariance=covariance(),
        degrees_of_freedom=200.0,
        angle_unit="deg",
        adequacy=Adequacy(statistic=70.0, degrees_of_freedom=76, p_value=0.67),
        clock=clock,
        explained=0.999,
        caveats=tuple(caveats),
        runs=("response-001",),
        settings={"method": "periodic", "free_start": False},
    )
    time = np.arange(0, 8, 1 / 60)
    return Identification(
        response=response, model=found, time=time, residual=0.3 * rng.standard_normal(len(time)),
        angle=rng.standard_normal(len(time)),
    )  # fmt: skip


def step_run(*, offset_known: bool = False, noise: float = 0.0, name: str = "step-001") -> Run:
    """The vane driven by three steps of 1 V: up, down, down."""
    time = np.arange(0, 8.5, 1e-3)
    voltage = np.zeros(len(time))
    voltage[(time >= STEP_TIMES[0]) & (time < STEP_TIMES[1])] = 1.0
    voltage[time >= STEP_TIMES[2]] = -1.0
    sensor = SimulatedSensor(
        sample_rate=60.0, exposure=0.004, noise=noise, common_clock=offset_known,
        clock_ratio=1.0 if offset_known else 1.00015, clock_offset=0.0 if offset_known else CLOCK_OFFSET,
    )  # fmt: skip
    drive = InputStream(time=time, voltage=voltage, hold="zero-order", commanded=True)
    rig = SimulatedRig(model=VANE, sensor=sensor, rest_angle=2.5)
    run = rig.run(drive, kind="step", name=name, rng=np.random.default_rng(2))
    return replace(run, notes=("the column <angle> & its unit were taken from the header",))


def response_run() -> Run:
    """A run of the same drive that is said to repeat every 2 s, with an unreadable and a clipped stretch."""
    run = step_run(noise=0.1, name="response-001")
    angle = run.angle.angle.copy()
    angle[10] = np.nan
    angle[20:25] = 40.0
    drive = replace(run.input, periodicity=Periodicity(period=2.0, lines=np.array([0.5, 1.0]), start=1.0, stop=7.0))
    return replace(run, kind="response", input=drive, angle=replace(run.angle, angle=angle))


def step_result(*, offset_known: bool = False) -> StepResult:
    """The step test of the vane with its true values."""
    clock = clock_map(offset_known=offset_known)
    known = StepResult(
        quantities={}, steps=(), model=replace(VANE, delay=clock.lag.value), covariance=covariance(),
        degrees_of_freedom=150.0, angle_unit="deg", clock=clock, explained=0.998, runs=("step-001",),
    )  # fmt: skip
    read: dict[str, Quantity | None] = {name: known.derived.get(name) for name in STEP_QUANTITIES}
    read["static_gain"] = quantity(12.01, "deg/V", 0.02)
    read["log_decrement"] = None
    levels = (0.0, 1.0, 0.0, -1.0)
    steps = tuple(
        StepReading(time=time, voltage_before=levels[n], voltage_after=levels[n + 1], quantities=read)
        for n, time in enumerate(STEP_TIMES)
    )
    return replace(known, quantities=read, steps=steps)


def row(name: str, *, away: float, width: float, verdict: RowVerdict, tolerance: float = 0.1) -> ComparedRow:
    """Both tests about 1, `away` tolerances apart, each with a half interval of `width` tolerances."""
    u = width * tolerance / 1.959963984540054
    first, second = quantity(1 + away * tolerance / 2, "Hz", u), quantity(1 - away * tolerance / 2, "Hz", u)
    return ComparedRow(
        quantity=name, frequency_test=first, step_test=second, tolerance=tolerance, verdict=verdict,
        difference=quantity(away * tolerance, "Hz", u * np.sqrt(2)), en=away / (width * np.sqrt(2)),
    )  # fmt: skip


def exhibit() -> Exhibit:
    """A picture with every kind of series: points with bars, a line, a band, a limit."""
    x = np.arange(1.0, 9.0)
    fall = 20 * np.exp(-0.42 * x)
    return Exhibit(
        title="Peaks after a step", x_label="half cycle", x_unit="", y_label="amplitude", y_unit="deg",
        logarithmic=("y",),
        series=(
            Series(kind="points", source="step test", label="peaks, 95 %", x=x, y=fall + 0.2, uncertainty=0.1 * fall),
            Series(kind="line", source="model", label="viscous <decay>", x=x, y=fall),
            Series(kind="band", source="noise", label="noise", x=x, y=np.full(8, 0.1), upper=np.full(8, 0.3)),
            Series(kind="line", source="limit", label="stop", x=x, y=np.full(8, 25.0)),
        ),
    )  # fmt: skip


def cross_check(*rows: ComparedRow) -> CrossCheck:
    """A comparison of the rows, or one of each verdict and a quantity that no test determined."""
    undetermined = ComparedRow(
        quantity="delay", frequency_test=None, step_test=None, difference=None, en=None, tolerance=None,
        verdict="not judged", reason="the clocks share no zero",
    )  # fmt: skip
    usual = (
        row("gain", away=0.1, width=0.3, verdict="agree"),
        row("natural_frequency", away=0.5, width=1.0, verdict="unresolved"),
        row("damping_ratio", away=-2.0, width=0.2, verdict="disagree"),
        undetermined,
    )
    return CrossCheck(
        verdict="disagree",
        sentence="The damping ratio differs by twice its tolerance.",
        compared=rows or usual,
        joint=JointTest(statistic=12.5, degrees_of_freedom=3, p_value=0.0058),
        causes=(
            Cause(cause="amplitude_dependence", strength=0.7, evidence="Large steps are <damped> more & longer.",
                  against="Two <small> steps are not.", exhibit=exhibit(),
                  settling_test="A test at half the amplitude."),
        ),
        requirements=(
            RequirementRow(
                requirement="percent_overshoot_max", quantity="percent_overshoot", sense="max", limit=20.0, unit="%",
                frequency_test=quantity(68.4, "%", 0.2), step_test=None, frequency_verdict="not met",
                step_verdict="not decided", verdict="not met", reason="by <one> test",
            ),
        ),
        next_test=NextTest(command="freqid excite vane --kind step --duration 90", reason="More steps settle it."),
    )


def rig_called(name: str) -> Rig:
    """The built-in vane under another name."""
    vane = built_in_vane()
    return replace(vane, rig=replace(vane.rig, name=name))


def full_inputs() -> ReportInputs:
    """A report with every part; names hold characters that HTML gives a meaning."""
    origin = Origin(source="log <1> & more.csv", sha256="ef" * 32, content='input "u", angle "y"')
    return ReportInputs(
        rig=rig_called("vane <A> & \"B\""),
        identification=identification(caveats=[Caveat("doubt", "Something <odd> & doubtful.")]),
        response_run=replace(response_run(), origins=(origin,)),
        step_result=step_result(),
        step_run=step_run(noise=0.1),
        crosscheck=cross_check(),
        files={"runs/response <1>.h5": "ab" * 32},
        versions={"numpy": np.__version__},
        created="2024-02-29 12:00",
        folder='"my vane"',
    )
