"""Designs voltage profiles that identify a rig without passing its limits.

Multisines, swept sines and step sequences, each as large as voltage, slew rate and the predicted swing
allow; what they will do to the rig, and how well they will measure it. Needs of the rig only an object
with `response(frequency)` and `sensitivity(frequency)` (`RigModel`).
"""

from excitation.amplitude import Allowance, largest_allowance, scaled_to_limits
from excitation.crest_factor import crest_factor_of, lower_peak, multisine_waveform, random_phases, schroeder_phases
from excitation.errors import ExcitationError, LimitExceeded
from excitation.export import ProfileFiles, write_profile
from excitation.information import PredictedUncertainties, SensorSettings, predicted_uncertainties
from excitation.limits import Limits
from excitation.multisine import design_multisine
from excitation.multisine_layout import MultisineLayout, MultisineSettings, lay_out_multisine
from excitation.profile import Profile
from excitation.profile_file import read_profile
from excitation.rig_model import Resonance, RigModel, find_resonance
from excitation.step_sequence import StepSettings, design_step_sequence, settling_time
from excitation.sweep_rate import SweepDistortion, distortion_at_rate, fastest_rate, slowest_resonance, sweep_time
from excitation.swept_sine import SweptSineSettings, design_swept_sine, exponential_sweep, linear_sweep
from excitation.swing import PredictedAngle, check_swing, predicted_angle, predicted_swing, worst_swing

__all__ = [
    "Allowance",
    "ExcitationError",
    "LimitExceeded",
    "Limits",
    "MultisineLayout",
    "MultisineSettings",
    "PredictedAngle",
    "PredictedUncertainties",
    "Profile",
    "ProfileFiles",
    "Resonance",
    "RigModel",
    "SensorSettings",
    "StepSettings",
    "SweepDistortion",
    "SweptSineSettings",
    "check_swing",
    "crest_factor_of",
    "design_multisine",
    "design_step_sequence",
    "design_swept_sine",
    "distortion_at_rate",
    "exponential_sweep",
    "fastest_rate",
    "find_resonance",
    "largest_allowance",
    "lay_out_multisine",
    "linear_sweep",
    "lower_peak",
    "multisine_waveform",
    "predicted_angle",
    "predicted_swing",
    "predicted_uncertainties",
    "random_phases",
    "read_profile",
    "scaled_to_limits",
    "schroeder_phases",
    "settling_time",
    "slowest_resonance",
    "sweep_time",
    "worst_swing",
    "write_profile",
]
