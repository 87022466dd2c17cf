"""What does the rig sheet tell the design of an excitation: which rig to expect, and within which limits?

The step test gives a most probable rig and, with its uncertainties (relative, at 95 %), a box of rigs
around it. A swing is safe only if it is safe all over the box: at the highest gain (the swing is
proportional to it), at the lowest, middle and highest natural frequency, and at either end of the damping
ratio. The delay moves the swing in time and leaves it as large.
"""

from __future__ import annotations

from itertools import product

from excitation.limits import Limits
from excitation.profile import Profile
from excitation.swing import check_swing
from freqid.rig import Rig
from freqid.second_order import SecondOrder

__all__ = ["SWING_MARGIN", "check_against_limits", "expected_rig", "limits_of", "rigs_of_the_box"]

SWING_MARGIN = 0.9  # of the way to the stops, at the worst corner of the box


def limits_of(rig: Rig) -> Limits:
    """The limits of the rig; the voltage is also held to what the output can give."""
    return Limits(
        voltage=min(rig.limits.voltage, rig.output.full_scale),
        slew_rate=rig.limits.slew_rate,
        angle=rig.limits.angle,
        bias=rig.limits.bias,
    )


def expected_rig(rig: Rig) -> SecondOrder | None:
    """The rig that [step_test] describes; None where gain, natural frequency or damping ratio is not known."""
    known = rig.step_test
    if known.gain is None or known.natural_frequency is None or known.damping_ratio is None:
        return None
    return SecondOrder(
        gain=known.gain,
        natural_frequency=known.natural_frequency,
        damping_ratio=known.damping_ratio,
        delay=known.delay or 0.0,
    )


def rigs_of_the_box(rig: Rig) -> tuple[SecondOrder, ...]:
    """The expected rig and the six worst of its uncertainty box; empty where there is no expected rig."""
    expected = expected_rig(rig)
    if expected is None:
        return ()
    known = rig.step_test
    low, high = _ends(expected.natural_frequency, known.natural_frequency_uncertainty)
    corners = product(
        (low, expected.natural_frequency, high), _ends(expected.damping_ratio, known.damping_ratio_uncertainty)
    )
    largest_gain = expected.gain * (1 + known.gain_uncertainty)
    return expected, *(
        SecondOrder(gain=largest_gain, natural_frequency=frequency, damping_ratio=damping, delay=expected.delay)
        for frequency, damping in corners
    )


def check_against_limits(profile: Profile, rig: Rig) -> float | None:
    """Worst predicted swing of the profile within the limits of the sheet as it is now; None without a rig to expect.

    Raises
    ------
    excitation.LimitExceeded
        Voltage, slew rate or predicted swing passes its limit; the message holds the figures.
    """
    limits = limits_of(rig)
    limits.check_profile(profile)
    rigs = rigs_of_the_box(rig)
    return check_swing(profile, rigs, limits, margin=SWING_MARGIN) if rigs else None


def _ends(value: float, relative: float) -> tuple[float, float]:
    return value * (1 - relative), value * (1 + relative)
