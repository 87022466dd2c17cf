"""The command line as a whole: its verbs, its one error boundary, its exit statuses."""

from __future__ import annotations

import errno
import subprocess
import sys
from pathlib import Path

import pytest

import freqid
from excitation.errors import ExcitationError, LimitExceeded
from freqid.cli import main
from freqid.cli.verbs import VERBS
from freqid.errors import CaptureError, FreqidError, RigSheetError, TestFolderError

NAMES = ("new", "rehearse", "excite", "devices", "capture", "import", "estimate", "steptest", "crosscheck", "report",
         "coefficients", "status", "selfcheck")  # fmt: skip


def raising(monkeypatch: pytest.MonkeyPatch, fault: BaseException) -> None:
    """Let the work of `freqid new` fail in the given way."""

    def fail(*_: object, **__: object) -> None:
        raise fault

    monkeypatch.setattr("freqid.cli.new.create_folder", fail)


def test_help_lists_the_verbs_in_the_order_of_the_work(capsys: pytest.CaptureFixture[str]) -> None:
    """Every verb stands in the help once, in the order of the design, with what it does."""
    assert main(["--help"]) == 0
    out, err = capsys.readouterr()
    section = out.split("Verbs:")[1].split("Options:")[0].splitlines()
    listed = [line.split()[0] for line in section if line.startswith("  ") and not line.startswith("   ")]
    assert tuple(listed) == NAMES == tuple(verb.name for verb in VERBS)
    assert all(verb.does.split(",")[0][:20] in out for verb in VERBS)
    assert err == ""


def test_help_is_light() -> None:
    """`freqid --help` loads no library that takes long to load."""
    program = (
        "import sys; from freqid.cli import main; status = main(['--help']);"
        "heavy = {'numpy', 'scipy', 'matplotlib', 'h5py', 'sounddevice', 'rich', 'jinja2'} & set(sys.modules);"
        "sys.exit(f'loaded {sorted(heavy)}' if heavy else status)"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (0, "")


def test_version_is_that_of_the_package(capsys: pytest.CaptureFixture[str]) -> None:
    """`freqid --version` says the version on stdout."""
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"freqid {freqid.__version__}\n"


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (["estimat", "x"], "no verb 'estimat'; did you mean 'estimate'?"),
        (["EXCITE", "x"], "no verb 'EXCITE'; did you mean 'excite'?"),
        (["cross-check", "x"], "did you mean 'crosscheck'?"),
        (["zzzz"], "no verb 'zzzz'; verbs are new, rehearse, excite"),
        (["new"], "Missing argument 'FOLDER'"),
        (["new", "a", "b"], "unexpected extra argument"),
        (["new", "--forse", "a"], "No such option '--forse'"),
        (["capture", "x", "--kind", "ramp"], "'ramp' is not one of 'response', 'step'"),
        (["capture", "x", "--simulate", "--seed", "one"], "'one' is not a valid integer"),
        (["capture", "x", "--simulate", "--device", "1"], "--device and --simulate exclude each other"),
        (["excite", "x", "--band", "1"], "Option '--band' requires 2 arguments"),
        (["excite", "x", "--duration", "0"], "Invalid value for '--duration'"),
        (["excite", "x", "--wanted-damping", "nan"], "'nan' is no finite number"),
        (["excite", "x", "--amplitude", "inf"], "'inf' is no finite number"),
        (["import", "x"], "give --log FILE"),
        (["import", "x", "--log", "a", "--angle", "b"], "give --log FILE"),
        (["import", "x", "--input", "a"], "give --log FILE"),
    ],
)
def test_wrong_usage_is_status_2_and_one_line(
    words: list[str], expected: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """Wrong usage is answered on stderr in one line that says what is wrong and where help is."""
    assert main(words) == 2
    out, err = capsys.readouterr()
    assert out == "" and err.count("\n") == 1
    assert expected in err and err.startswith("freqid: ") and "--help`" in err


def test_no_verb_at_all_shows_the_help(capsys: pytest.CaptureFixture[str]) -> None:
    """`freqid` alone is wrong usage, and shows the verbs on stderr."""
    assert main([]) == 2
    out, err = capsys.readouterr()
    assert out == "" and "Verbs:" in err


@pytest.mark.parametrize(
    ("fault", "expected"),
    [
        (FreqidError("some fault"), "freqid: some fault"),
        (RigSheetError("rig.toml: [limits] voltage = -1: must be above 0"), "[limits] voltage = -1: must be above 0"),
        (TestFolderError("x: no such test folder"), "freqid: x: no such test folder"),
        (CaptureError("two\nlines"), "freqid: two lines"),
        (ExcitationError("band: no"), "freqid: band: no"),
        (LimitExceeded("swing: 40 predicted"), "freqid: swing: 40 predicted"),
        (OSError(errno.ENOSPC, "No space left on device", "runs/a é.h5"), "runs/a é.h5: No space left on device; make"),
        (PermissionError(errno.EACCES, "Permission denied"), "freqid: Permission denied"),
        (OSError("odd"), "freqid: odd"),
    ],
)
def test_faults_are_status_1_and_one_line(
    fault: Exception, expected: str, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """A fault of data, design or disk is one line on stderr, also when FREQID_DEBUG is set."""
    monkeypatch.setenv("FREQID_DEBUG", "1")
    raising(monkeypatch, fault)
    assert main(["new", "x"]) == 1
    out, err = capsys.readouterr()
    assert out == "" and err.count("\n") == 1 and expected in err


def test_unexpected_fault_is_told_without_traceback(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """What nobody foresaw is one line that asks for a report, with the cause, and status 1."""
    monkeypatch.delenv("FREQID_DEBUG", raising=False)
    raising(monkeypatch, ZeroDivisionError("division by zero"))
    assert main(["new", "x"]) == 1
    err = capsys.readouterr().err
    assert "unexpected fault (ZeroDivisionError: division by zero); please report it" in err
    assert "Traceback" not in err and err.count("\n") == 1


def test_unexpected_fault_is_raised_again_for_developers(monkeypatch: pytest.MonkeyPatch) -> None:
    """With FREQID_DEBUG=1 the exception comes through."""
    monkeypatch.setenv("FREQID_DEBUG", "1")
    raising(monkeypatch, ZeroDivisionError())
    with pytest.raises(ZeroDivisionError):
        main(["new", "x"])


def test_interruption_is_status_130(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    """Ctrl-C is answered quietly with the usual status."""
    raising(monkeypatch, KeyboardInterrupt())
    assert main(["new", "x"]) == 130
    assert "interrupted" in capsys.readouterr().err


@pytest.mark.parametrize("verb", ["excite", "capture", "import"])
def test_missing_folder_is_told_with_the_remedy(
    verb: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Every verb refuses a folder that is not there with the command that makes it."""
    log = ["--log", "x.csv"] if verb == "import" else []
    assert main([verb, str(tmp_path / "nowhere"), *log]) == 1
    out, err = capsys.readouterr()
    assert out == "" and err.count("\n") == 1
    assert "no such test folder; make one with `freqid new" in err


def test_public_names_are_fetched_when_asked_for() -> None:
    """Every name the package offers is there, and an unknown one is an AttributeError."""
    assert all(getattr(freqid, name) is not None for name in freqid.__all__)
    assert set(freqid.__all__) <= set(dir(freqid))
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        freqid.nothing  # noqa: B018
