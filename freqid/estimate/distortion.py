"""How much of the angle is distortion, line by line? Read at the harmonics that carry no voltage.

A linear rig answers a periodic voltage at the excited lines only. What stands above the noise at the other harmonics of
the period, between the lowest and the highest line, is distortion: where only odd harmonics are excited, terms of even
order fall on even harmonics and terms of odd order on odd ones. As odd terms fall on excited lines just as well, their
level at the odd harmonics left out tells what they do to the response.

The levels come from the same regression as the response (`periodic`), at the true instants of the frames, so lost
frames, jitter and the clock ratio do not smear the strong lines into the weak ones. Levels are amplitudes of a sine
(rms times sqrt 2) in the angle as recorded. At a line with amplitude A and noise of variance E|n|^2 = s^2

    power = |A|^2 - s^2,    u(power)^2 = 2 power s^2 + s^4 (1 + 2 / v)

with v degrees of freedom of s^2: the noise is taken off, so the power is right on average and may come out negative.

Source: Pintelon & Schoukens, *System Identification*, 2nd ed. 2012, ch. 4 (odd multisines with detection lines).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.periodic import LineRegression
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit
from freqid.quantity import in_unit

__all__ = ["EVEN", "ODD", "UNDIVIDED", "DistortionLevels", "distortion_levels"]

Floats = NDArray[np.float64]
UNDIVIDED, ODD, EVEN = 0, 1, 2


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DistortionLevels:
    """Distortion at the detection lines `frequency` (L,), ascending; all arrays share that shape.

    `power` is the squared amplitude less that of the noise (it may be negative), `noise` the noise amplitude of one
    line, `linear` the amplitude that the rig's linear answer would have there if it were excited like its neighbours.
    `parity` is `ODD` or `EVEN`, or `UNDIVIDED` where even harmonics are excited too.
    """

    frequency: Floats = in_unit("Hz")
    power: Floats = in_unit("angle_unit^2")
    power_uncertainty: Floats = in_unit("angle_unit^2")
    noise: Floats = in_unit("angle_unit")
    linear: Floats = in_unit("angle_unit")
    noise_freedom: Floats = in_unit("1")
    parity: NDArray[np.intp] = in_unit("1")

    @property
    def level(self) -> Floats:
        """Amplitude of the distortion in angle units, noise taken off; 0 where the noise explains it all."""
        return np.asarray(np.sqrt(np.maximum(self.power, 0.0)))

    @property
    def highest_level(self) -> Floats:
        """Upper end of the level's 95 % interval, angle units."""
        return np.asarray(np.sqrt(np.maximum(self.power, 0.0) + 1.96 * self.power_uncertainty))

    @property
    def relative(self) -> Floats:
        """`level` over the linear answer, of order one."""
        return np.asarray(self.level / self.linear)

    def of(self, parity: int) -> DistortionLevels:
        """The lines of one parity."""
        return self.keep(self.parity == parity)

    def at(self, frequency: Floats, parity: int) -> Floats:
        """Level (F,) of one parity at other frequencies, its power joined by straight lines; NaN where none is known.

        A level of undivided distortion stands for both parities.
        """
        seen = self.of(parity) if np.any(self.parity == parity) else self.of(UNDIVIDED)
        if len(seen.frequency) == 0:
            return np.full(len(frequency), np.nan)
        return np.asarray(np.sqrt(np.interp(frequency, seen.frequency, np.maximum(seen.power, 0.0))))

    def keep(self, chosen: NDArray[np.bool_] | NDArray[np.intp]) -> DistortionLevels:
        """The chosen lines."""
        return DistortionLevels(
            frequency=self.frequency[chosen],
            power=self.power[chosen],
            power_uncertainty=self.power_uncertainty[chosen],
            noise=self.noise[chosen],
            linear=self.linear[chosen],
            noise_freedom=self.noise_freedom[chosen],
            parity=self.parity[chosen],
        )


def distortion_levels(
    record: Record, fit: RecordFit, lines: LineRegression, measured: FrequencyResponse
) -> DistortionLevels | None:
    """Levels at the harmonics without voltage between the lines of a regression, with the noise of `measured`, the
    response from the same lines.

    None where every harmonic is excited, where a single period cannot tell distortion from noise, or where the frames
    cannot carry so many lines.
    """
    count = len(lines.basis.orders) - len(lines.free)
    excited = lines.basis.orders[:count]
    between = (lines.free > excited.min()) & (lines.free < excited.max())
    if not np.any(between):
        return None
    orders, spread = lines.free[between], lines.spread[count:][between]
    frequency = orders / lines.periodicity.period
    noise = spread * np.interp(frequency, measured.frequency, measured.noise**2 / lines.spread[:count])
    freedom = np.interp(frequency, measured.frequency, measured.degrees_of_freedom)
    power = np.abs(lines.amplitudes(fit.residual)[count:][between]) ** 2 - noise
    return DistortionLevels(
        frequency=frequency,
        power=power,
        power_uncertainty=np.sqrt(2 * np.maximum(power, 0.0) * noise + noise**2 * (1 + 2 / freedom)),
        noise=np.sqrt(noise),
        linear=_linear_amplitude(record, fit, measured, frequency),
        noise_freedom=freedom,
        parity=_parity(excited, orders),
    )


def _parity(excited: NDArray[np.intp], free: NDArray[np.intp]) -> NDArray[np.intp]:
    if np.any(excited % 2 == 0):
        return np.full(len(free), UNDIVIDED)
    return np.where(free % 2 == 1, ODD, EVEN)


def _linear_amplitude(record: Record, fit: RecordFit, measured: FrequencyResponse, frequency: Floats) -> Floats:
    """Amplitude of the recorded linear answer, were the lines' voltage there as well: powers joined by straight lines,
    times the fitted model, averaged over the exposure.
    """
    voltage = np.sqrt(np.interp(frequency, measured.frequency, measured.input_amplitude**2))
    gain = np.abs(fit.parameters.model.response(frequency) * np.sinc(frequency * record.exposure))
    return np.asarray(voltage * gain)
