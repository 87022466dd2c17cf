"""How do the two clocks relate? True time t = offset + ratio * stamp, and what was lost on the way.

When nothing common to both logs was recorded, the offset cannot be told from the rig's delay: then
`offset_known` is false, `offset` is None and the delay of the model contains it (delay - offset).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import Quantity, in_unit

__all__ = ["ClockMap"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ClockMap:
    """The map from the sensor's stamps to the time of the voltage, and the state of the frames.

    `ratio_ppm` is (ratio - 1) in parts per million. `lag` is what the records themselves show: delay - offset.
    `lost_at` (L,) are the stamps just before each gap, `lost_frames` how many frames fell into the gaps;
    `outlier_at` are the stamps of the samples left out, `silently_lost_at` those after losses without a gap, and
    `silently_lost_between` (L, 2) the stamps between which each of these lies with 95 % probability. `jitter`
    is the rms deviation of the stamps from a uniform grid in s; `repeated_stamps` counts stamps equal to the one
    before.
    """

    ratio_ppm: Quantity
    offset_known: bool
    lag: Quantity
    lost_frames: int
    lost_at: NDArray[np.float64] = in_unit("s")
    frame_interval: float = in_unit("s")
    jitter: float = in_unit("s")
    repeated_stamps: int = 0
    frames: int = 0
    outlier_at: NDArray[np.float64] = field(default_factory=lambda: np.empty(0), metadata={"unit": "s"})
    silently_lost_at: NDArray[np.float64] = field(default_factory=lambda: np.empty(0), metadata={"unit": "s"})
    silently_lost_between: NDArray[np.float64] = field(
        default_factory=lambda: np.empty((0, 2)), metadata={"unit": "s"}
    )

    def as_json(self) -> dict[str, Any]:
        """The form of "clock" in results/model.json."""
        return {
            "ratio_ppm": self.ratio_ppm.as_json(),
            "offset_known": self.offset_known,
            "lag": self.lag.as_json(),
            "lost_frames": self.lost_frames,
            "frames": self.frames,
            "frame_interval": self.frame_interval,
            "stamp_jitter": self.jitter,
            "repeated_stamps": self.repeated_stamps,
            "lost_at": self.lost_at.tolist(),
            "outlier_at": self.outlier_at.tolist(),
            "silently_lost_at": self.silently_lost_at.tolist(),
            "silently_lost_between": self.silently_lost_between.tolist(),
        }

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> ClockMap:
        """Back from the form of results/model.json."""
        ratio, lag = Quantity.from_json(data["ratio_ppm"]), Quantity.from_json(data["lag"])
        if ratio is None or lag is None:
            raise ValueError("clock: ratio_ppm and lag are needed")
        return cls(
            ratio_ppm=ratio,
            offset_known=data["offset_known"],
            lag=lag,
            lost_frames=data["lost_frames"],
            lost_at=np.array(data["lost_at"]),
            frame_interval=data["frame_interval"],
            jitter=data["stamp_jitter"],
            repeated_stamps=data["repeated_stamps"],
            frames=data["frames"],
            outlier_at=np.array(data["outlier_at"]),
            silently_lost_at=np.array(data["silently_lost_at"]),
            silently_lost_between=np.array(data.get("silently_lost_between", []), dtype=float).reshape(-1, 2),
        )
