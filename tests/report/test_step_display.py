"""The step figure lays measurement and prediction on one time axis, and its band is what the covariance implies."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from report_rig import STEP_TIMES, VANE, covariance, identification, step_result, step_run

from freqid.quantity import coverage_factor
from freqid.report.figure_style import svg_text
from freqid.report.step_display import chosen_steps, curve_times, predicted_step, step_view
from freqid.report.step_figure import step_figure_of
from freqid.second_order import SecondOrder
from freqid.step_relations import normalised_step_response


def test_chosen_steps_are_the_first_clear_one_up_and_down() -> None:
    """Equal steps, equally well read: the first of each direction."""
    assert [step.time for step in chosen_steps(step_result())] == [STEP_TIMES[0], STEP_TIMES[1]]


def test_step_with_less_read_off_gives_way() -> None:
    """A step whose overshoot was not determined is not the one to show."""
    result = step_result()
    poor = replace(result.steps[1], quantities={**result.steps[1].quantities, "percent_overshoot": None})
    shown = chosen_steps(replace(result, steps=(result.steps[0], poor, result.steps[2])))
    assert [step.time for step in shown] == [STEP_TIMES[0], STEP_TIMES[2]]


@pytest.mark.parametrize("offset_known", [False, True])
def test_noise_free_samples_lie_on_the_prediction(offset_known: bool) -> None:
    """With the true model and clock the samples are the prediction, on one clock or on two."""
    result, found = step_result(offset_known=offset_known), identification(offset_known=offset_known)
    view = step_view(step_run(offset_known=offset_known), result, result.steps[0])
    predicted = predicted_step(view, found, result, view.time)
    assert len(view.time) > 60
    # the simulation averages over an exposure 150 ppm longer, as the view does; the rest angle is a median of equal
    # values; what remains is rounding of 1e-16 / (wn dt)^2 with wn dt = 0.019, times a gain of 12 and 8000 steps
    np.testing.assert_allclose(view.angle, predicted.angle, atol=1e-7)


def test_prediction_is_the_closed_form_step_response() -> None:
    """Without averaging a lone step of 1 V is gain times the normalised step response."""
    result = step_result()
    view = replace(step_view(step_run(), result, result.steps[0]), exposure=0.0)
    time = np.linspace(-0.2, 1.5, 200)
    expected = VANE.gain * normalised_step_response(2 * np.pi * VANE.natural_frequency * time, VANE.damping_ratio)
    got = predicted_step(view, identification(), result, time).angle
    # rounding as above
    np.testing.assert_allclose(got, np.where(time > 0, expected, 0.0), atol=1e-7)


def test_band_is_the_scatter_of_models_drawn_from_the_covariance() -> None:
    """Half the band over the coverage factor equals the standard deviation over 2000 drawn models, delay left out."""
    result, found = step_result(), identification()
    view = step_view(step_run(), result, result.steps[0])
    time = np.array([0.05, 0.166, 0.3, 0.8, 1.5])
    band = predicted_step(view, found, result, time).half / coverage_factor(found.model.degrees_of_freedom)
    rng = np.random.default_rng(7)
    drawn = rng.multivariate_normal(VANE.vector[:3], covariance()[:3, :3], size=2000)
    motions = [
        model.gain * normalised_step_response(2 * np.pi * model.natural_frequency * time, model.damping_ratio)
        for model in (SecondOrder(gain=k, natural_frequency=f, damping_ratio=z) for k, f, z in drawn)
    ]
    # a standard deviation from 2000 draws scatters by 1/sqrt(4000) = 1.6 %; five values at 4 sigma: 6.5 %; averaging
    # over 4 ms of a 333 ms period changes the motion by (pi 0.004 / 0.333)^2 / 6 = 0.02 %
    np.testing.assert_allclose(band, np.std(motions, axis=0), rtol=0.065)


def test_known_delay_widens_the_band_where_the_motion_is_fast() -> None:
    """On one clock the uncertain delay moves the flank; on two clocks the onsets are laid on each other."""
    time = np.array([0.06])
    halves = []
    for offset_known in (True, False):
        result = step_result(offset_known=offset_known)
        view = step_view(step_run(offset_known=offset_known), result, result.steps[0])
        halves.append(predicted_step(view, identification(offset_known=offset_known), result, time).half[0])
    assert halves[0] > halves[1]


def test_view_ends_before_the_next_step() -> None:
    """A hold of 2.5 s is never shown longer than that."""
    result = step_result()
    view = step_view(step_run(), result, result.steps[0])
    assert view.span[0] < 0 < view.span[1] < STEP_TIMES[1] - STEP_TIMES[0]
    assert curve_times(view)[0] == view.span[0]


def test_figure_draws_stops_only_where_the_motion_comes_near() -> None:
    """The vane swings to about 20 deg: stops at 25 deg are drawn, stops at 100 deg are not."""
    result, run = step_result(), step_run(noise=0.1)

    def names(stops: float) -> list[str]:
        figure = step_figure_of(run, result, identification=identification(), stops=stops)
        return [text.get_text() for axes in figure.axes for text in axes.texts]

    assert "end stop" in names(25.0)
    assert "end stop" not in names(100.0)


def test_many_samples_are_drawn_as_their_range_with_means() -> None:
    """Twenty times the frames: one line from least to most, and means whose intervals mostly hold the truth."""
    run, result = step_run(), step_result()
    stamps = np.linspace(run.angle.time[0], run.angle.time[-1], 20 * len(run.angle.time))
    noisy = np.interp(stamps, run.angle.time, run.angle.angle) + np.random.default_rng(4).normal(0, 0.3, len(stamps))
    many = replace(run, angle=replace(run.angle, time=stamps, angle=noisy))
    figure = step_figure_of(many, result, identification=identification())
    words = [text.get_text() for axes in figure.axes for text in axes.texts]
    assert "— measured, from least to most" in words and any(word.startswith("◇ means of") for word in words)
    assert len(svg_text(figure)) < 300_000


def test_figure_without_a_model_shows_the_measurement_alone() -> None:
    """One panel per direction, no residual panel."""
    assert len(step_figure_of(step_run(), step_result()).axes) == 2
    assert len(step_figure_of(step_run(), step_result(), identification=identification()).axes) == 4
