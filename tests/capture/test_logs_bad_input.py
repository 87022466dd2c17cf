"""Every log that is no use is refused in one line that names the file, the value, the limit and the remedy."""

from __future__ import annotations

from pathlib import Path

import pytest

from freqid.capture.logs import ImportSettings, RigFacts, run_from_one_log
from freqid.errors import LogError

RIG = RigFacts(
    angle_unit="deg",
    angle_sample_rate=60.0,
    exposure=0.0,
    stamp="end",
    output_sample_rate=1000.0,
    output_hold="zero-order",
    output_full_scale=10.0,
    angle_full_scale=45.0,
)


def rows(count: int = 40, *, u: str = "{n}", y: str = "{m}", t: str = "{s:.4f}") -> str:
    """Rows of t,u,y from templates of n, m = n mod 7 and s = n / 60."""
    row = f"{t},{u},{y}\n"
    return "".join(row.format(n=n, m=n % 7, s=n / 60) for n in range(count))


def half_empty() -> str:
    """The input in the first half of the rows, the angle in the second."""
    return "".join(f"{n / 60:.4f},{n if n < 40 else ''},{'' if n < 40 else n}\n" for n in range(80))


BAD: dict[str, tuple[str | bytes | None, str]] = {
    "missing": (None, r"log\.csv: no such file"),
    "empty": ("", "the file is empty"),
    "blank": ("\n \n", "the file is empty"),
    "header only": ("t,u,y\n", "a header only"),
    "text only": ("note\n" + "hello\nworld\n" * 20, "no line with a number in 41 lines"),
    "binary": (b"\x7fELF\x00\x00\x01\x02" * 200, "neither text nor WAV nor HDF5"),
    "damaged WAV": (b"RIFF\x10\x00\x00\x00WAVEfmt ", "not a readable WAV file"),
    "damaged HDF5": (b"\x89HDF\r\n\x1a\n" + bytes(40), "not a readable HDF5 file"),
    "5 samples": ("t,u,y\n" + rows(5), "5 samples: at least 20 are needed"),
    "constant angle": ("t,u,y\n" + rows(y="3.5"), r"angle column \"y\" is constant at 3\.5 in all 40 samples"),
    "constant input": ("t,u,y\n" + rows(u="2"), r"input column \"u\" is constant at 2 in all 40 samples"),
    "all NaN": ("t,u,y\n" + rows(y="nan"), r"angle column \"y\" holds no number in 40 rows"),
    "angle of words": ("t,u,y\n" + rows(y="lost"), r"column 3 \"y\" holds text|which column is the angle"),
    "backwards": (
        "t,u,y\n" + rows(30) + "0.1,3,4\n" + rows(40).split("\n", 31)[-1],
        r"line 32: the time runs backwards from 0\.4833 to 0\.1",
    ),
    "no overlap": ("t,u,y\n" + half_empty(), "do not overlap"),
    "no time": ("u,y\n" + rows(t="").replace("\n,", "\n")[1:], "which column is the time.*--sample-rate"),
    "long row": ("t,u,y\n" + rows(20) + "1,2,3,4\n" + rows(3), "line 22 has 4 cells, the table has 3 columns"),
    "strange time": ("t (h),u,y\n" + rows(), r"is in \"h\"; give --time-unit"),
    "no stamp": ("t,u,y\n" + rows(t="noon"), r"\"noon\" is neither a number nor an ISO 8601"),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_log_is_refused_in_one_line(tmp_path: Path, case: str) -> None:
    """Each useless log gives one clear line that names the file."""
    content, message = BAD[case]
    path = tmp_path / "log.csv"
    if isinstance(content, bytes):
        path.write_bytes(content)
    elif content is not None:
        path.write_text(content, encoding="utf-8")
    with pytest.raises(LogError, match=message) as fault:
        run_from_one_log(path, settings=ImportSettings(), rig=RIG)
    assert "log.csv" in str(fault.value) and "\n" not in str(fault.value)


@pytest.mark.parametrize(
    ("choice", "message"),
    [
        ({"time_unit": "h"}, '--time-unit "h" is no unit of time'),
        ({"angle_unit": "gon"}, '--angle-unit "gon" is no unit of angle'),
        ({"angle_column": "9"}, 'no column "9"'),
    ],
)
def test_bad_choice_is_refused_in_one_line(tmp_path: Path, choice: dict[str, str], message: str) -> None:
    """A choice the log or the program cannot follow is refused with what may be given."""
    path = tmp_path / "log.csv"
    path.write_text("t,u,y\n" + rows(), encoding="utf-8")
    with pytest.raises(LogError, match=message):
        run_from_one_log(path, settings=ImportSettings(**choice), rig=RIG)  # type: ignore[arg-type]


@pytest.mark.parametrize("rate", [0.0, -1.0, float("inf"), float("nan")])
def test_rate_must_be_above_zero(rate: float) -> None:
    """A sample rate that is none is refused before anything is read."""
    with pytest.raises(LogError, match="is no rate"):
        ImportSettings(sample_rate=rate)
