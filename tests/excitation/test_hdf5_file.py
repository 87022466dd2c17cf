"""Does a file hold exactly what was written, and does nothing half-written stay?"""

from __future__ import annotations

import errno
import hashlib
import os
from pathlib import Path

import numpy as np
import pytest

from excitation.errors import ExcitationError
from excitation.hdf5_file import file_sha256, read_hdf5, write_hdf5


def test_everything_written_comes_back(tmp_path: Path) -> None:
    """Arrays, units, groups, text and attributes survive a round trip through a path with spaces and umlauts."""
    path = tmp_path / "Prüfstand 1.h5"
    angle = np.array([0.1, np.nan, -3.5])
    write_hdf5(
        path,
        datasets={
            "angle": (angle, "deg"),
            "input/voltage": (np.arange(4), "V"),
            "names": (np.array(["größer", "b"]), "1"),
            "empty": (np.empty(0), "s"),
            "covariance": (np.eye(2), "1"),
        },
        attributes={"format": "test – α", "format_version": 1, "ratio": 0.1, "complete": True},
    )
    content = read_hdf5(path)
    assert content.attributes == {"format": "test – α", "format_version": 1, "ratio": 0.1, "complete": True}
    assert isinstance(content.attributes["complete"], bool)
    assert isinstance(content.attributes["format_version"], int)
    np.testing.assert_array_equal(content.datasets["angle"], angle)
    np.testing.assert_array_equal(content.datasets["input/voltage"], np.arange(4))
    assert content.datasets["names"].tolist() == ["größer", "b"]
    assert content.datasets["empty"].shape == (0,)
    assert content.units == {"angle": "deg", "input/voltage": "V", "names": "1", "empty": "s", "covariance": "1"}


def test_failure_leaves_the_old_file_and_no_other(tmp_path: Path) -> None:
    """A dataset that cannot be stored leaves the earlier file as it was and no temporary beside it."""
    path = tmp_path / "a.h5"
    write_hdf5(path, datasets={"x": (np.ones(2), "V")}, attributes={})
    before = file_sha256(path)
    with pytest.raises(TypeError):
        write_hdf5(path, datasets={"x": (np.array([object()]), "V")}, attributes={})
    assert file_sha256(path) == before
    assert [entry.name for entry in tmp_path.iterdir()] == ["a.h5"]


def test_full_disk_is_an_os_error_and_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A disk that fills up while the file is renamed into place leaves an empty folder."""

    def full(source: str, target: Path) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), str(target))

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(OSError, match=r"a\.h5"):
        write_hdf5(tmp_path / "a.h5", datasets={"x": (np.ones(2), "V")}, attributes={})
    assert list(tmp_path.iterdir()) == []


def test_missing_folder_is_an_os_error(tmp_path: Path) -> None:
    """A folder that does not exist is named in the message."""
    with pytest.raises(OSError, match="does not exist"):
        write_hdf5(tmp_path / "no" / "a.h5", datasets={}, attributes={})


def test_damaged_or_foreign_file_is_told_in_one_line(tmp_path: Path) -> None:
    """Text, an empty file and a file cut in half are each refused by name."""
    whole = tmp_path / "whole.h5"
    write_hdf5(whole, datasets={"x": (np.random.default_rng(1).normal(size=5000), "V")}, attributes={})
    for name, content in {"text": b"time,angle\n", "empty": b"", "cut": whole.read_bytes()[:9000]}.items():
        path = tmp_path / f"{name}.h5"
        path.write_bytes(content)
        with pytest.raises(ExcitationError, match=r"not a readable HDF5 file") as caught:
            read_hdf5(path)
        assert str(path) in str(caught.value)
        assert "\n" not in str(caught.value)


def test_absent_file_is_not_called_damaged(tmp_path: Path) -> None:
    """A file that is not there is a FileNotFoundError."""
    with pytest.raises(FileNotFoundError, match="no such file"):
        read_hdf5(tmp_path / "none.h5")


def test_sha256_of_published_example(tmp_path: Path) -> None:
    """The digest of "abc" is the one of FIPS 180-4's example; a long file agrees with hashing it in one piece."""
    (tmp_path / "abc").write_bytes(b"abc")
    assert file_sha256(tmp_path / "abc") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    long = bytes(range(256)) * 10_000
    (tmp_path / "long").write_bytes(long)
    assert file_sha256(tmp_path / "long") == hashlib.sha256(long).hexdigest()
