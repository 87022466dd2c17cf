"""What will this voltage do to the rig, and where does it look? Drawn before anything is driven.

Three panels: the voltage against time between its limits; its spectrum and that of the angle it is predicted to cause,
over what the response owes to natural frequency and damping ratio (all relative to their largest, so only the shapes
compare), with the lines that are left free to show distortion; the swing it is predicted to cause, for every rig of the
step test's uncertainty box, against the end stops.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from excitation.limits import Limits
from excitation.profile import Profile
from excitation.rig_model import RigModel
from excitation.swing import hold_response, predicted_angle
from freqid.report.envelope import thinned
from freqid.report.figure_style import LIGHT, MARK, Palette, dress, new_figure
from freqid.report.gain_and_phase import frequency_ticks

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["draw_profile_spectrum", "draw_profile_swing", "draw_profile_voltage", "profile_card_figure"]

Floats = NDArray[np.float64]
_STRETCHES = 600  # of the time axis: the swing is shown by its extremes in each
_FINER = 4
_MOST_MARKS = 300
_NEGLIGIBLE = 1e-3  # of the largest amplitude: below it a line of a non-periodic voltage is not shown


def profile_card_figure(
    profile: Profile, rigs: Sequence[RigModel], limits: Limits, *, angle_unit: str = "deg", palette: Palette = LIGHT
) -> Figure:
    """The card: voltage, spectrum and, where `rigs` (the likeliest first) are given, sensitivities and swing."""
    figure, axes = new_figure(height=6.6 if rigs else 4.4, rows=3 if rigs else 2, palette=palette)
    draw_profile_voltage(axes[0], profile, limits, palette=palette)
    draw_profile_spectrum(axes[1], profile, rigs[0] if rigs else None, palette=palette)
    if rigs:
        draw_profile_swing(axes[2], profile, rigs, limits, angle_unit=angle_unit, palette=palette)
    return figure


def draw_profile_voltage(axes: Axes, profile: Profile, limits: Limits, *, palette: Palette = LIGHT) -> None:
    """Voltage against time, the limits hatched."""
    dress(axes, palette)
    axes.plot(*thinned(profile.time, profile.voltage, points=2 * _STRETCHES), color=palette.model, linewidth=0.6)
    largest = float(np.max(np.abs(profile.voltage)))
    reach = 1.12 * (limits.voltage if largest > 0.5 * limits.voltage else max(largest, 1e-12))
    axes.set(xlim=(0, profile.duration), ylim=(-reach, reach), xlabel="time (s)", ylabel="voltage (V)")
    _hatch(axes, limits.voltage, reach, palette)
    room = f"{100 * largest / limits.voltage:.0f} % of the voltage limit of ±{limits.voltage:g} V"
    axes.set_title(f"{profile.kind}, {profile.duration:.4g} s, {room}", loc="left", fontsize=9, color=palette.model)


def draw_profile_spectrum(
    axes: Axes, profile: Profile, rig: RigModel | None = None, *, palette: Palette = LIGHT
) -> None:
    """Amplitude of the held voltage at its lines and of the angle, and the sensitivities, each to its largest."""
    dress(axes, palette)
    frequency, amplitude = _spectrum(profile)
    shown = amplitude / max(float(np.max(amplitude)), 1e-300)
    if profile.lines.size:
        axes.vlines(frequency, 0, shown, color=palette.noise, linewidth=1.2)
    else:
        axes.fill_between(*thinned(frequency, shown), color=palette.noise, alpha=0.5, linewidth=0)
    low, high = float(frequency[0]) / 1.1, float(frequency[-1]) * 1.1
    axes.set(xscale="log", ylim=(0, 1.05), ylabel="relative to the largest", xlabel="frequency (Hz)")
    frequency_ticks(axes, (low, high))
    words = ["grey: voltage"]
    if rig is not None:
        _angle(axes, rig, frequency, amplitude, palette)
        _sensitivities(axes, rig, (low, high), palette)
        words[0] += "; ochre: the angle it causes"
        words.append("lines: what it owes to natural frequency —, damping ratio - -")
    words += _detection(axes, profile, palette)
    axes.set_title("\n".join(words), loc="left", fontsize=8.5, color=palette.model)


def draw_profile_swing(
    axes: Axes,
    profile: Profile,
    rigs: Sequence[RigModel],
    limits: Limits,
    *,
    angle_unit: str = "deg",
    palette: Palette = LIGHT,
) -> None:
    """Predicted angle from the operating point: the likeliest rig inside the extremes of all `rigs`, stops hatched."""
    dress(axes, palette)
    edges = np.linspace(0, profile.duration + 1.0, _STRETCHES + 1)
    low, high = _extremes(profile, rigs, edges)
    own_low, own_high = _extremes(profile, rigs[:1], edges)
    middle = (edges[1:] + edges[:-1]) / 2
    axes.fill_between(middle, low, high, color=palette.noise, alpha=0.55, linewidth=0)
    axes.fill_between(middle, own_low, own_high, color=palette.step_test, linewidth=0.4)
    reach = 1.15 * max(limits.angle, float(np.max(np.abs([low, high]))))
    axes.set(xlim=(0, edges[-1]), ylim=(-reach, reach), xlabel="time (s)", ylabel=f"angle ({angle_unit})")
    _hatch(axes, limits.angle, reach, palette)
    largest = max(float(np.max(high)), -float(np.min(low)))
    axes.set_title(
        f"predicted swing at most {largest:.3g} {angle_unit}, stops at ±{limits.angle:g} {angle_unit}\n"
        "ochre: the rig expected; grey: all rigs that the step test leaves possible",
        loc="left", fontsize=8.5, color=palette.model,
    )  # fmt: skip


def _spectrum(profile: Profile) -> tuple[Floats, Floats]:
    """Frequencies (F,) and amplitudes (F,): the lines of a periodic voltage, else all that is not negligible."""
    departure = profile.voltage - profile.bias
    if profile.period_samples:
        part = departure[profile.steady_start : profile.steady_start + profile.period_samples]
        harmonic = np.round(profile.lines * profile.period_samples / profile.sample_rate).astype(int)
        amplitude = np.abs(np.fft.rfft(part))[harmonic] * 2 / len(part)
        frequency = np.asarray(profile.lines)
    else:
        n_points = _FINER * len(departure)  # rest appended: a finer grid shows the lobes of the spectrum
        amplitude = np.abs(np.fft.rfft(departure, n_points))[1:] * 2 / len(departure)
        frequency = np.asarray(np.fft.rfftfreq(n_points, 1 / profile.sample_rate)[1:], dtype=float)
    amplitude = amplitude * np.abs(hold_response(frequency, step=1 / profile.sample_rate, hold=profile.hold))
    kept = np.flatnonzero(amplitude >= _NEGLIGIBLE * np.max(amplitude))
    if not profile.lines.size and len(kept):
        kept = np.arange(kept[0], _last_above(amplitude) + 1)
    return frequency[kept], amplitude[kept]


def _last_above(amplitude: Floats) -> int:
    """Where 99.9 % of the power of the spectrum has been passed."""
    power = np.cumsum(amplitude**2)
    return int(min(np.searchsorted(power, 0.999 * power[-1]) + 1, len(amplitude) - 1))


def _angle(axes: Axes, rig: RigModel, frequency: Floats, amplitude: Floats, palette: Palette) -> None:
    angle = amplitude * np.abs(rig.response(frequency))
    shown = angle / max(float(np.max(angle)), 1e-300)
    if frequency.size > _MOST_MARKS:
        axes.plot(*thinned(frequency, shown), color=palette.step_test, linewidth=0.8)
    else:
        axes.plot(frequency, shown, color=palette.step_test, linestyle="none", marker=MARK["step_test"], markersize=2.6)


def _detection(axes: Axes, profile: Profile, palette: Palette) -> list[str]:
    """Marks under the lines that are left free, and what to say of them."""
    even, odd = profile.detection_lines
    for free, length in ((even, 0.03), (odd, 0.07)):
        axes.vlines(free, 0, length, color=palette.distortion, linewidth=1.0)
    if not even.size and not odd.size:
        return []
    return [f"plum: left free for distortion, {even.size} even (short), {odd.size} odd (long)"]


def _sensitivities(axes: Axes, rig: RigModel, band: tuple[float, float], palette: Palette) -> None:
    frequency = np.geomspace(*band, 500)
    dependence = np.abs(rig.sensitivity(frequency))
    for column, style in ((1, "-"), (2, "--")):
        curve = dependence[:, column] / max(float(np.max(dependence[:, column])), 1e-300)
        axes.plot(frequency, curve, color=palette.model, linewidth=1.2, linestyle=style)


def _extremes(profile: Profile, rigs: Sequence[RigModel], edges: Floats) -> tuple[Floats, Floats]:
    """Smallest and largest predicted angle between the edges, over all rigs, (E - 1,) each."""
    low, high = np.full(len(edges) - 1, np.inf), np.full(len(edges) - 1, -np.inf)
    for rig in rigs:
        predicted = predicted_angle(profile, rig)
        fine = np.unique(np.concatenate([predicted.time, edges]))
        fine = fine[fine <= edges[-1]]
        angle = np.interp(fine, predicted.time, predicted.angle)
        start = np.searchsorted(fine, edges[:-1])
        low = np.minimum(low, np.minimum.reduceat(angle, start))
        high = np.maximum(high, np.maximum.reduceat(angle, start))
    return low, high


def _hatch(axes: Axes, limit: float, reach: float, palette: Palette) -> None:
    for side in (-1, 1):
        if limit < reach:
            axes.axhspan(side * limit, side * 1.5 * reach, facecolor="none", edgecolor=palette.limit, hatch="////",
                         linewidth=0.8, alpha=0.7)  # fmt: skip
