"""How would a sound interface with the simulated rig behind it behave? The same contract, in software.

Input 1 is the voltage that went out, input 2 the angle, both one round trip later. The angle follows the second-order
equation for straight lines between the samples (first-order hold); a delay between two samples is interpolated.
Faults can be planted: the stream stops delivering, loses frames with or without a flag, the loopback's cable comes
off. It runs in real time, or as fast as it can with FREQID_SIMULATED_PACE=fast.
"""

from __future__ import annotations

import math
import os
import threading
import time
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.capture.sound.interface import Exchange, Float32s, SoundDevice, StreamRequest
from freqid.errors import CaptureError
from freqid.held_response import free_decay

__all__ = ["SimulatedFaults", "SimulatedInterface", "SimulatedPlant"]

DEVICE_NAME = "simulated"
BLOCK_FRAMES = 1024
MOST_RATE = 768_000.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedFaults:
    """What goes wrong, at times of the stream in s; negative: never.

    `silent_loss` frames vanish without a flag, `flagged_loss` with one.
    """

    stops_at: float = -1.0
    loses_at: float = -1.0
    silent_loss: int = 0
    flagged_loss: int = 0
    loopback_off_at: float = -1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedPlant:
    """The rig and the scales: gain in angle per V, delay in s, noise rms in angle, full scales per digital 1."""

    gain: float
    natural_frequency: float
    damping_ratio: float
    delay: float
    noise: float
    output_full_scale: float
    loopback_full_scale: float
    angle_full_scale: float
    round_trip: float = 0.02  # s, and one block
    seed: int = 0
    faults: SimulatedFaults = field(default_factory=SimulatedFaults)

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> SimulatedPlant:
        """Back from `dataclasses.asdict`."""
        return cls(**{**data, "faults": SimulatedFaults(**data.get("faults", {}))})


class SimulatedInterface:
    """One device with one output and two inputs."""

    def __init__(self, plant: SimulatedPlant) -> None:
        self._plant = plant

    def ask(self) -> tuple[SoundDevice, ...]:
        """The one device."""
        return (
            SoundDevice(number=0, name=DEVICE_NAME, host="software", output_channels=1, input_channels=2,
                        sample_rate=48000.0),
        )  # fmt: skip

    def check(self, request: StreamRequest) -> None:
        """Any rate up to 768 kHz."""
        if request.sample_rate > MOST_RATE:
            raise CaptureError(f"{DEVICE_NAME!r} refuses {request.sample_rate:g} Hz; at most {MOST_RATE:g} Hz")

    def run(self, request: StreamRequest, exchange: Exchange) -> SimulatedStream:
        """Start a thread that asks the exchange for block after block."""
        return SimulatedStream(_Rig(self._plant, request.sample_rate), request, exchange)


class SimulatedStream:
    """A thread in place of the sound system's own."""

    def __init__(self, rig: _Rig, request: StreamRequest, exchange: Exchange) -> None:
        self._rig, self._request, self._exchange = rig, request, exchange
        self._closing = threading.Event()
        self._thread = threading.Thread(target=self._run, daemon=True)
        self._thread.start()

    def close(self) -> None:
        """End the thread."""
        self._closing.set()
        self._thread.join(2.0)

    def _run(self) -> None:
        rate, faults = self._request.sample_rate, self._rig.plant.faults
        real_time = os.environ.get("FREQID_SIMULATED_PACE") != "fast"
        n, started, position = min(BLOCK_FRAMES, max(16, int(rate / 40))), time.monotonic(), 0
        going_out = np.zeros((n, self._request.output_channels), dtype=np.float32)
        coming_in = np.zeros((n, 2), dtype=np.float32)
        lost = 0
        while not self._closing.is_set():
            if 0 <= faults.stops_at <= position / rate:
                return
            flags = 0
            if not lost and 0 <= faults.loses_at <= position / rate:
                lost = faults.flagged_loss or faults.silent_loss
                self._rig.lose(lost)
                flags = 2 if faults.flagged_loss else 0
            if not self._exchange(coming_in, going_out, flags):
                return
            position += n
            coming_in = self._rig.answer(going_out[:, 0], loopback_off=0 <= faults.loopback_off_at <= position / rate)
            if real_time:
                time.sleep(max(0.0, started + position / rate - time.monotonic()))


class _Rig:
    """The two input channels that follow from the output, block after block."""

    def __init__(self, plant: SimulatedPlant, rate: float) -> None:
        self.plant, self._rate = plant, rate
        self._natural = 2 * math.pi * plant.natural_frequency
        self._state = (0.0, 0.0)  # angle per unit gain in V, its rate over the natural angular frequency
        self._before = 0.0  # V at the end of the last block
        line = max(1, round(plant.round_trip * rate))
        self._late = np.zeros(line)  # V on their way to the loopback
        whole, fraction = divmod(plant.delay * rate, 1.0)
        self._to_rig = np.zeros(line + int(whole) + 1)
        self._weights = (1 - fraction, fraction)
        self._rng = np.random.default_rng(plant.seed)
        self._decay = np.empty((0, 2))

    def lose(self, n_frames: int) -> None:
        """The next frames on both ways come so much later."""
        self._late = np.concatenate([np.full(n_frames, self._late[0]), self._late])
        self._to_rig = np.concatenate([np.full(n_frames, self._to_rig[0]), self._to_rig])

    def answer(self, sent: Float32s, *, loopback_off: bool) -> Float32s:
        """Loopback and angle (n, 2) in digital full scale; what was sent (n,) takes the round trip to arrive."""
        plant, n = self.plant, sent.size
        voltage = sent.astype(np.float64) * plant.output_full_scale
        loopback, self._late = _through(self._late, voltage)
        self._to_rig = np.concatenate([self._to_rig, voltage])
        arriving = self._weights[0] * self._to_rig[1 : n + 1] + self._weights[1] * self._to_rig[:n]
        self._to_rig = self._to_rig[n:]
        angle = plant.gain * self._moved(arriving) + plant.noise * self._rng.standard_normal(n)
        if loopback_off:
            loopback = np.zeros(n)
        return np.stack([loopback / plant.loopback_full_scale, angle / plant.angle_full_scale], axis=1).astype(
            np.float32
        )

    def _moved(self, voltage: NDArray[np.float64]) -> NDArray[np.float64]:
        """Angle per unit gain at the instants of the voltage (n,): straight lines from the last sample through all.

        Over a piece with slope s the motion about the particular solution u + s (t - 2 zeta / wn) decays freely
        (`freqid.held_response`); what each piece adds is carried on by the free decay, a convolution.
        """
        zeta, n = self.plant.damping_ratio, voltage.size
        if len(self._decay) < n + 1:
            self._decay = free_decay(self._natural, zeta, np.arange(n + 1) / self._rate)
        from_angle, from_rate = self._decay[: n + 1, 0], self._decay[: n + 1, 1]
        begin = np.concatenate([[self._before], voltage[:-1]])
        rate = (voltage - begin) * self._rate / self._natural
        lag = 2 * zeta * rate
        added = voltage - lag - from_angle[1] * (begin - lag) - from_rate[1] * rate
        added_rate = rate + from_rate[1] * (begin - lag) - (from_angle[1] - 2 * zeta * from_rate[1]) * rate
        angle, speed = self._state
        moved = (
            np.convolve(from_angle[:n], added)[:n] + np.convolve(from_rate[:n], added_rate)[:n]
            + from_angle[1:] * angle + from_rate[1:] * speed
        )  # fmt: skip
        own_rate = from_angle - 2 * zeta * from_rate  # rate from unit rate; from unit angle it is minus `from_rate`
        last = float(own_rate[n - 1 :: -1] @ added_rate - from_rate[n - 1 :: -1] @ added)
        self._state = (float(moved[-1]), last + float(own_rate[n] * speed - from_rate[n] * angle))
        self._before = float(voltage[-1])
        return moved


def _through(line: NDArray[np.float64], values: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    whole = np.concatenate([line, values])
    return whole[: values.size], whole[values.size :]
