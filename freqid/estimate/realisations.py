"""What is the best linear response from several runs, and how much of their scatter is noise, how much distortion?

At each line, over M runs of P periods each,

    s_n^2   = mean over m of var(G_m) / M                   the noise, known from the periods (or between the lines)
    s^2     = sum |G_m - G|^2 / (M (M - 1))                 what the runs truly scatter
    s_NL^2  = M (s^2 - s_n^2)                               stochastic nonlinear distortion of one run

for complex variances. Runs with other phases are different realisations: their scatter contains the distortion, and s^2
is the variance of the mean. Runs with the same voltage show the same distortion every time, so their scatter is noise
and drift only, and what the single runs know of the distortion stays in the variance.
s^2 has 2 (M - 1) degrees of freedom a line; it is averaged over neighbouring lines, relative to s_n^2, until 20 are
reached, so that its own scatter does not pass for structure.

Source: Pintelon & Schoukens, *System Identification*, 2nd ed. 2012, ch. 4 (the robust method).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frequency_response import FrequencyResponse
from freqid.second_order import SecondOrder

__all__ = ["CombinedResponse", "RobustMean", "mean_response", "robust_mean", "same_voltage"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
ENOUGH = 20.0  # degrees of freedom of a total variance
SAME = 0.95  # correlation of the lines' complex amplitudes above which two voltages are one and the same


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RobustMean:
    """Mean response (F,) over M runs with complex variances of that mean: `noise`, `total`; `nonlinear` is that of the
    stochastic distortion of a single run (it may be negative by chance).
    """

    response: Complexes
    noise: Floats
    total: Floats
    nonlinear: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CombinedResponse:
    """Mean `response` of several runs, how many `realisations` (different voltages) it rests on, and the degrees of
    freedom (F,) of the noise in it.
    """

    response: FrequencyResponse
    realisations: int
    noise_freedom: Floats


def robust_mean(responses: Complexes, noise_variance: Floats) -> RobustMean:
    """From the responses (M, F) of M >= 2 realisations and the noise variance (M, F) of each."""
    count = len(responses)
    mean = responses.mean(axis=0)
    noise = noise_variance.mean(axis=0) / count
    total = np.sum(np.abs(responses - mean) ** 2, axis=0) / (count * (count - 1))
    return RobustMean(response=mean, noise=noise, total=total, nonlinear=count * (total - noise))


def same_voltage(first: FrequencyResponse, second: FrequencyResponse) -> bool:
    """Whether two runs were driven with the same voltage, up to its size and a shift in time."""
    if len(first.frequency) != len(second.frequency):
        return False
    if not np.allclose(first.frequency, second.frequency, rtol=1e-6):
        return False
    if first.input_phase is None or second.input_phase is None:
        one, other = first.input_amplitude, second.input_amplitude
        return bool(np.max(np.abs(one / other / np.mean(one / other) - 1)) < 0.1)
    if len(first.frequency) < 3:
        return True
    product = first.input_amplitude * second.input_amplitude
    turn = product * np.exp(1j * (second.input_phase - first.input_phase))
    spacing = float(np.min(np.diff(first.frequency)))
    position = np.round((first.frequency - first.frequency[0]) / spacing).astype(int)
    spectrum = np.zeros(8 * (int(position[-1]) + 1), dtype=complex)
    spectrum[position] = turn
    return bool(np.max(np.abs(np.fft.fft(spectrum))) > SAME * np.sum(product))


def mean_response(
    found: Sequence[FrequencyResponse], models: Sequence[SecondOrder], *, common_clock: bool
) -> CombinedResponse:
    """The mean of several responses, on the lines of the last one that all of them cover.

    `models` are the runs' own; without a common clock each response is first shifted by its own lag to that of the
    last. Between other runs' lines it is interpolated as a ratio to the model, which is smooth.
    """
    last = found[-1]
    low, high = max(one.frequency[0] for one in found), min(one.frequency[-1] for one in found)
    covered = (last.frequency >= low * (1 - 1e-9)) & (last.frequency <= high * (1 + 1e-9))
    if not np.any(covered):
        return CombinedResponse(response=last, realisations=1, noise_freedom=last.degrees_of_freedom)
    last = _chosen(last, covered)
    reference = models[-1]
    responses, noises, totals = [], [], []
    for one, model in zip(found, models, strict=True):
        lag = 0.0 if common_clock else model.delay - reference.delay
        values, noise, total = _on_lines(one, last.frequency, reference, lag)
        responses.append(values)
        noises.append(noise)
        totals.append(total)
    groups = _by_voltage(found)
    freedom = last.degrees_of_freedom * len(found)
    if len(groups) == 1:
        mean = robust_mean(np.array(responses), np.array(noises))
        together = _repeated(last, mean, np.array(totals))
    else:
        means = np.array([np.mean([responses[number] for number in group], axis=0) for group in groups])
        within = np.array([np.mean([noises[number] for number in group], axis=0) / len(group) for group in groups])
        together = _realised(last, robust_mean(means, within), len(groups))
    return CombinedResponse(response=together, realisations=len(groups), noise_freedom=freedom)


def _by_voltage(found: Sequence[FrequencyResponse]) -> list[list[int]]:
    """Numbers of the runs that were driven with the same voltage, group by group."""
    groups: list[list[int]] = []
    for number, one in enumerate(found):
        for group in groups:
            if same_voltage(found[group[0]], one):
                group.append(number)
                break
        else:
            groups.append([number])
    return groups


def _chosen(one: FrequencyResponse, covered: NDArray[np.bool_]) -> FrequencyResponse:
    arrays = {
        name: value[covered]
        for name in (
            "frequency", "response", "variance", "coherence", "noise", "input_amplitude", "degrees_of_freedom",
            "nonlinear", "input_phase",
        )
        if (value := getattr(one, name)) is not None
    }  # fmt: skip
    return replace(one, **arrays)


def _on_lines(
    one: FrequencyResponse, frequency: Floats, reference: SecondOrder, lag: float
) -> tuple[Complexes, Floats, Floats]:
    """Response, noise variance and total variance at other lines."""
    ratio = one.response * np.exp(2j * np.pi * one.frequency * lag) / reference.response(one.frequency)
    size = np.abs(reference.response(one.frequency)) ** 2
    at = np.interp(frequency, one.frequency, ratio.real) + 1j * np.interp(frequency, one.frequency, ratio.imag)
    there = np.abs(reference.response(frequency)) ** 2
    total = np.interp(frequency, one.frequency, one.variance / size) * there
    noise = np.interp(frequency, one.frequency, one.noise_variance / size) * there
    return at * reference.response(frequency), noise, total


def _repeated(last: FrequencyResponse, mean: RobustMean, totals: Floats) -> FrequencyResponse:
    """Same voltage: noise averages out over the runs, what they know of the distortion does not."""
    count = len(totals)
    distortion = np.maximum(totals.mean(axis=0) - count * mean.noise, 0.0)
    return _with(last, mean, variance=mean.noise + distortion, freedom=last.degrees_of_freedom * count)


def _realised(last: FrequencyResponse, mean: RobustMean, count: int) -> FrequencyResponse:
    """Different voltages: the runs' own scatter, averaged over neighbours."""
    half = int(np.ceil((ENOUGH / (2 * (count - 1)) - 1) / 2))
    ratio = mean.total / mean.noise
    order = np.arange(len(ratio))
    first, stop = np.maximum(order - half, 0), np.minimum(order + half + 1, len(ratio))
    sums = np.concatenate([[0.0], np.cumsum(ratio)])
    smooth = (sums[stop] - sums[first]) / (stop - first)
    freedom = 2.0 * (count - 1) * (stop - first)
    together = _with(last, mean, variance=mean.noise * smooth, freedom=freedom)
    recorded = last.noise / np.sqrt(last.noise_variance)
    nonlinear = np.sqrt(np.maximum(mean.noise * (smooth - 1), 0.0)) * recorded
    return replace(together, nonlinear=nonlinear)


def _with(last: FrequencyResponse, mean: RobustMean, *, variance: Floats, freedom: Floats) -> FrequencyResponse:
    recorded = last.noise / np.sqrt(last.noise_variance)
    noise = np.sqrt(mean.noise) * recorded
    return replace(last, response=mean.response, variance=variance, noise=noise, degrees_of_freedom=freedom)
