"""Does an exhibit keep what is drawn, and refuse what cannot be?"""

from __future__ import annotations

import json

import numpy as np
import pytest

from freqid.crosscheck.exhibit import Exhibit, Series


def series(**changes: object) -> Series:
    """Three points with uncertainty, or changed."""
    facts: dict[str, object] = {
        "kind": "points", "source": "step test", "label": "seen", "x": np.arange(3.0), "y": np.array([1.0, 2.5, -3.0]),
        "uncertainty": np.full(3, 0.1),
    }  # fmt: skip
    return Series(**{**facts, **changes})  # type: ignore[arg-type]


def test_an_exhibit_survives_its_json() -> None:
    """To five significant digits, band and all; JSON without NaN."""
    band = series(kind="band", upper=np.array([2.0, 3.0, 4.123456789]), uncertainty=None)
    shown = Exhibit(title="t", x_label="time", x_unit="s", y_label="left over", y_unit="deg", series=(series(), band),
                    logarithmic=("x",))  # fmt: skip
    text = json.dumps(shown.as_json(), allow_nan=False)
    back = Exhibit.from_json(json.loads(text))
    assert back is not None
    assert (back.title, back.x_unit, back.logarithmic) == ("t", "s", ("x",))
    for found, given in zip(back.series, shown.series, strict=True):
        assert (found.kind, found.source, found.label) == (given.kind, given.source, given.label)
        np.testing.assert_array_equal(found.x, given.x)
        np.testing.assert_array_equal(found.y, given.y)
    assert back.series[1].upper is not None
    assert back.series[1].upper[2] == 4.1235
    assert Exhibit.from_json(None) is None


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"y": np.zeros(2)}, "shape"),
        ({"y": np.array([1.0, np.nan, 0.0])}, "not finite"),
        ({"upper": np.ones(3)}, "only to a band"),
        ({"kind": "band"}, "belongs to a band"),
        ({"uncertainty": np.ones((3, 1))}, "shape"),
    ],
)
def test_a_series_that_cannot_be_drawn_is_refused(changes: dict[str, object], said: str) -> None:
    """One line says what is wrong."""
    with pytest.raises(ValueError, match=said):
        series(**changes)


def test_a_series_cannot_be_changed() -> None:
    """Its arrays are its own and read-only."""
    x = np.arange(3.0)
    made = series(x=x)
    x[0] = 7.0
    assert made.x[0] == 0.0
    with pytest.raises(ValueError, match="read-only"):
        made.x[0] = 1.0
