"""Gain, phase, residuals and ribbon show what was measured, for every kind of model, and never a NaN."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pytest
from matplotlib.colors import same_color
from report_rig import OVERDAMPED, VANE, identification, response_run, step_result

from excitation import Limits, MultisineSettings, StepSettings, design_multisine, design_step_sequence
from freqid.errors import EstimationError
from freqid.estimate.distortion import EVEN, ODD, DistortionLevels
from freqid.estimate.identification import Identification
from freqid.report import gain_and_phase_figure, profile_card_figure, residual_figure, ribbon_figure, svg_text
from freqid.report.data_ribbon import ribbon_of
from freqid.report.envelope import thinned
from freqid.report.figure_style import LIGHT
from freqid.report.residual_ladder import scaled_residuals
from freqid.report.response_display import model_curve, shown_distortion, shown_response
from freqid.second_order import SecondOrder

LIMITS = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)


@pytest.mark.parametrize(
    ("model", "offset_known", "n_lines"),
    [
        (VANE, False, 1), (VANE, True, 1), (VANE, False, 3000), (OVERDAMPED, False, 40), (OVERDAMPED, True, 1),
        (replace(VANE, gain=-12.0), True, 40),
    ],
)  # fmt: skip
def test_figures_of_every_kind_are_drawn_without_nan(model: SecondOrder, offset_known: bool, n_lines: int) -> None:
    """One line, many lines, no resonance, a reversed sensor: SVG without NaN and below 300 kB."""
    found = identification(model, offset_known=offset_known, n_lines=n_lines)
    for figure in (gain_and_phase_figure(found, step_result=step_result()), residual_figure(found)):
        text = svg_text(figure)
        assert not re.search(r"\bnan\b", text, re.IGNORECASE)
        assert len(text) < 300_000


def test_resonance_panel_only_where_there_is_a_resonance() -> None:
    """From a damping ratio of 1/sqrt(2) on the gain has no peak to enlarge."""
    assert len(gain_and_phase_figure(identification(VANE)).axes) == 3
    assert len(gain_and_phase_figure(identification(OVERDAMPED)).axes) == 2


@pytest.mark.parametrize("model", [VANE, OVERDAMPED, replace(VANE, gain=-12.0)])
def test_phase_shown_is_the_model_without_its_lag_where_the_clocks_differ(model: SecondOrder) -> None:
    """With the lag taken out the phase of a second-order rig stays within half a turn of its start."""
    found = identification(model, offset_known=False)
    shown = shown_response(found.response, found.model)
    start = 0.0 if model.gain > 0 else -180.0
    assert np.all(shown.phase < start + 10) and np.all(shown.phase > start - 190)
    truth = np.degrees(np.angle(replace(model, delay=0.0).response(shown.frequency)))
    turns = (shown.phase - truth) / 360
    # the noise is 0.03 deg/V beside a smallest gain of 12 / 16 = 0.75 deg/V (12 Hz, four times fn): 0.04 rad rms or
    # less in either direction / sqrt(2); 40 lines at 4 sigma: 6.5 deg. Overdamped: gain 0.52 at 12 Hz, 9.4 deg.
    assert np.max(np.abs(turns - np.round(turns))) * 360 < 9.4


def test_phase_shown_keeps_a_delay_that_is_the_rigs_own() -> None:
    """On a common clock the phase falls by 360 f tau more."""
    without, own = identification(offset_known=False), identification(offset_known=True)
    band = (0.3, 12.0)
    fall = model_curve(own.model, band).phase - model_curve(without.model, band).phase
    frequency = model_curve(own.model, band).frequency
    # both phases are computed in double precision from numbers below 1000
    np.testing.assert_allclose(fall, -360 * VANE.delay * frequency, atol=1e-9)


def test_model_band_is_that_of_the_covariance() -> None:
    """At the lowest frequency the gain is K and its band that of K alone."""
    found = identification()
    curve = model_curve(found.model, (0.001, 10.0))
    half = found.model.parameters["gain"]
    assert half is not None
    # at x = f / fn = 3e-4 the gain and its derivatives differ from those at zero by x^2 = 1e-7, times 12 / 3 at most
    assert curve.gain_half[0] == pytest.approx(half.expanded_uncertainty, rel=1e-5)


def test_scaled_residuals_of_the_true_model_have_unit_scatter() -> None:
    """Over 200 seeds and 40 lines both parts have mean square one."""
    parts = []
    for seed in range(200):
        found = identification(seed=seed)
        parts.append(scaled_residuals(found.response, found.model.model))
    values = np.concatenate([[part.real, part.imag] for part in parts])
    # mean square of 16000 unit normals scatters by sqrt(2 / 16000) = 0.011; 4 sigma 0.045
    assert np.mean(values**2) == pytest.approx(1.0, abs=0.045)


def ribbon_inputs() -> Identification:
    """An identification whose residual holds one reading far from the model."""
    found = identification()
    residual = found.residual.copy()
    residual[100] = 30.0
    return replace(found, residual=residual)


def test_ribbon_finds_every_planted_fault() -> None:
    """One unreadable frame, five clipped readings, one outlier, one gap of three frames, one repeated stamp."""
    run = response_run()
    time = np.delete(run.angle.time, [200, 201, 202]).copy()
    angle = np.delete(run.angle.angle, [200, 201, 202])
    time[300] = time[299]
    run = replace(run, angle=replace(run.angle, time=time, angle=angle))
    ribbon = ribbon_of(run, ribbon_inputs())
    counts = {name: len(times) for name, times in ribbon.events.items()}
    assert counts == {
        "gap, frames lost": 1, "unreadable": 1, "repeated stamp": 1, "far from model": 1, "clipped": 5,
    }  # fmt: skip
    assert ribbon.lost_frames == 3
    assert ribbon.events["gap, frames lost"][0] == time[199]


def test_ribbon_is_quiet_when_all_is_well() -> None:
    """A clean run has no events, and the rms of each period is that of the residual."""
    run = response_run()
    clean = replace(run.angle, angle=np.sin(np.arange(len(run.angle.time))))
    found = identification()
    ribbon = ribbon_of(replace(run, angle=clean), found)
    assert sum(len(times) for times in ribbon.events.values()) == 0
    inside = (found.time >= 1.0) & (found.time < 7.0)
    # three periods with 120 frames each: their mean square is that of all
    assert np.mean(ribbon.period_rms**2) == pytest.approx(np.mean(found.residual[inside] ** 2), rel=1e-12)
    assert len(svg_text(ribbon_figure(run, found))) < 300_000


@pytest.mark.parametrize("kind", ["multisine", "step"])
@pytest.mark.parametrize("known", [False, True])
def test_profile_card_is_drawn_for_every_profile(kind: str, known: bool) -> None:
    """With rigs there are three panels, the swing among them; without any there are two."""
    rigs = (VANE, replace(VANE, gain=12.6, damping_ratio=0.1)) if known else ()
    if kind == "step":
        profile = design_step_sequence(StepSettings(sample_rate=500.0, limits=LIMITS, duration=12.0, amplitude=0.9))
    else:
        settings = MultisineSettings(
            band=(0.5, 8.0), duration=12.0, sample_rate=500.0, limits=LIMITS, phases="schroeder", amplitude=0.9
        )
        profile = design_multisine(settings)
    figure = profile_card_figure(profile, rigs, LIMITS)
    assert len(figure.axes) == (3 if known else 2)
    assert len(svg_text(figure)) < 300_000


def test_response_without_a_usable_line_is_refused_in_words() -> None:
    """Nothing finite to show is an error that the report turns into a sentence."""
    found = identification()
    empty = replace(found.response, variance=np.full(len(found.response.frequency), np.nan))
    with pytest.raises(EstimationError, match="none is finite"):
        gain_and_phase_figure(replace(found, response=empty))
    with pytest.raises(EstimationError, match="has an uncertainty"):
        residual_figure(replace(found, response=empty))


def test_thinning_keeps_every_extreme() -> None:
    """Of 100000 points the largest and the smallest stay, in order, and the number falls to what was asked."""
    rng = np.random.default_rng(3)
    x, y = np.arange(100_000.0), rng.standard_normal(100_000)
    y[77_777], y[5] = 50.0, np.nan
    kept_x, kept_y = thinned(x, y, points=1000)
    assert len(kept_x) <= 1000 and np.all(np.diff(kept_x) > 0)
    assert kept_y.max() == 50.0 and kept_y.min() == np.nanmin(y)


def _levels(power: list[float], parity: list[int]) -> DistortionLevels:
    """Detection lines from 1 Hz upwards, powers known to 0.01, each with a linear answer of 2 deg."""
    n = len(power)
    return DistortionLevels(
        frequency=np.arange(1.0, n + 1), power=np.array(power), power_uncertainty=np.full(n, 0.01),
        noise=np.full(n, 0.1), linear=np.full(n, 2.0), noise_freedom=np.full(n, 20.0), parity=np.array(parity),
    )  # fmt: skip


def test_distortion_is_shown_where_it_stands_clear_of_the_noise() -> None:
    """Only lines whose power exceeds twice its uncertainty are shown, as amplitude over linear answer times gain."""
    found = replace(identification(), distortion=_levels([0.04, 0.015, 0.09, -0.01], [ODD, ODD, EVEN, EVEN]))
    odd, even = shown_distortion(found)
    assert (odd.kind, even.kind) == ("odd", "even")
    np.testing.assert_allclose(odd.frequency, [1.0])
    np.testing.assert_allclose(even.frequency, [3.0])
    gain = np.abs(found.model.model.response(np.array([1.0, 3.0])))
    np.testing.assert_allclose([odd.gain[0], even.gain[0]], gain * np.sqrt([0.04, 0.09]) / 2)


def test_distortion_has_a_mark_and_a_name_of_its_own() -> None:
    """The figure names the order that is there, and draws its marks in plum."""
    found = replace(identification(), distortion=_levels([0.04, 0.0], [ODD, EVEN]))
    axes = gain_and_phase_figure(found).axes[0]
    assert "▲ odd" in axes.get_title(loc="right") and "even" not in axes.get_title(loc="right")
    marks = [line for line in axes.get_lines() if line.get_marker() == "^"]
    assert len(marks) == 1 and same_color(marks[0].get_color(), LIGHT.distortion)
    assert gain_and_phase_figure(identification()).axes[0].get_title(loc="right") == ""
