"""The commands: what they write, print and return, and that bad input costs one clear line."""

import errno
import io
import json
import os
import signal
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest

import pyvolterra as pv
from pyvolterra import calibration, cli, demo

# The arbitrage check of a fit may say that it was a little less accurate than it aimed for.


WRITTEN = {"fit.json", "residuals.csv", "report.html", "smiles"}
HEADER = "quote_time,expiry,strike,option_type,bid,ask\n"


@pytest.fixture(scope="module")
def quotes(tmp_path_factory):
    return demo.write_demo_quotes(tmp_path_factory.mktemp("demo") / "quotes.csv")


@pytest.fixture(scope="module")
def small_fit(quotes):
    """A fit of three expiries only: quicker to draw."""
    data = pv.read_quotes(quotes)
    return pv.calibrate(data.select(np.isin(data.expiry, np.unique(data.expiry)[[3, 6, 9]])))


@pytest.fixture
def ready_fit(small_fit, monkeypatch):
    monkeypatch.setattr(calibration, "calibrate", lambda *a, **k: small_fit)
    return small_fit


def run(*words):
    return subprocess.run(
        [sys.executable, "-P", "-m", "pyvolterra", *map(str, words)],
        capture_output=True,
        text=True,
        timeout=300,
    )


def fails_in_one_line(status, err, *, naming):
    assert status == 2
    assert err.startswith("pyvolterra: error: ")
    assert err.count("\n") == 1
    assert "Traceback" not in err
    assert naming in err


# ---------------------------------------------------------------- what works


def test_demo_from_quotes_to_report(tmp_path):
    out = tmp_path / "demo"
    done = run("demo", "--out", out)
    assert done.returncode == 0, done.stderr
    assert {p.name for p in out.iterdir()} >= WRITTEN | {cli.DEMO_QUOTES}
    assert str(out / "report.html") in done.stdout
    assert "\r" not in done.stderr  # no progress line without a terminal
    assert "Traceback" not in done.stderr
    document = json.loads((out / "fit.json").read_text(encoding="utf-8"))
    assert document["converged"] is True
    assert document["source"] == cli.DEMO_QUOTES
    assert abs(document["parameters"]["hurst"] - demo.HURST) < 0.03
    for shown in ("hurst", "vol_of_vol", "correlation", "inside bid-ask", "held fixed"):
        assert shown in done.stdout


def test_fit_prints_the_table_and_writes_the_files(quotes, ready_fit, tmp_path, capsys):
    out = tmp_path / "out"
    assert cli.main(["fit", str(quotes), "--out", str(out)]) == 0
    shown = capsys.readouterr()
    assert f"{ready_fit.parameters['vol_of_vol']:.5g}" in shown.out
    assert str(out / "report.html") in shown.out
    assert {p.name for p in out.iterdir()} >= WRITTEN
    # and again into the same folder
    assert cli.main(["fit", str(quotes), "--out", str(out)]) == 0


@pytest.mark.parametrize(("words", "value"), [((), 0.0), (("0.7",), 0.7), (("fit",), None)])
def test_options_reach_the_fit(quotes, small_fit, tmp_path, monkeypatch, words, value):
    seen = {}

    def calibrate(data, **options):
        seen.update(options)
        return small_fit

    monkeypatch.setattr(calibration, "calibrate", calibrate)
    option = [word for text in words for word in ("--mean-reversion", text)]
    assert cli.main(["fit", str(quotes), "--out", str(tmp_path), *option]) == 0
    assert seen["mean_reversion"] == value
    assert seen["strict"] is False


def test_info_names_versions_and_instruction_set(capsys):
    assert cli.main(["info"]) == 0
    shown = capsys.readouterr().out
    build = pv._core.build_info()
    for text in (pv.__version__, np.__version__, "python", "compiler", "threads"):
        assert text in shown
    assert build["instruction_set"] in shown


def test_not_converged_is_written_and_said(quotes, ready_fit, tmp_path, monkeypatch, capsys):
    unfinished = replace(ready_fit, converged=False, message="evaluations\nused up")
    monkeypatch.setattr(calibration, "calibrate", lambda *a, **k: unfinished)
    assert cli.main(["fit", str(quotes), "--out", str(tmp_path / "out")]) == 3
    shown = capsys.readouterr()
    assert shown.err == (
        "pyvolterra: warning: the fit did not converge (evaluations used up); "
        "the best point found was written\n"
    )
    assert "NO" in shown.out
    document = json.loads((tmp_path / "out" / "fit.json").read_text(encoding="utf-8"))
    assert document["converged"] is False


def test_a_poor_fit_is_called_one_in_one_line(quotes, ready_fit, tmp_path, monkeypatch, capsys):
    off = ready_fit.residuals + 4.0 / ready_fit.weights
    poor = replace(ready_fit, residuals=off, model_volatility=ready_fit.smiles.mid_volatility + off)
    monkeypatch.setattr(calibration, "calibrate", lambda *a, **k: poor)
    assert cli.main(["fit", str(quotes), "--out", str(tmp_path / "out")]) == 0
    (line,) = capsys.readouterr().err.splitlines()
    assert line.startswith("pyvolterra: warning: the model does not fit these quotes (0.0 % inside")
    assert "half-widths" in line
    page = (tmp_path / "out" / "report.html").read_text(encoding="utf-8")
    assert "The model does not fit these quotes" in page


def test_every_quote_read_is_accounted_for(small_fit):
    lines = cli.summary(small_fit).splitlines()
    head = lines[: lines.index("")]
    assert head[0] == f"{small_fit.quotes_read} quotes read"
    count = {line.split(maxsplit=1)[1]: int(line.split()[0]) for line in head}
    twins = next(n for words, n in count.items() if words.startswith("mostly in the money"))
    assert count["fitted"] + twins + count["set aside"] == small_fit.quotes_read
    reasons = head[head.index(f"{len(small_fit.rejections):>7} set aside") + 1 :]
    assert sum(int(line.split()[0]) for line in reasons) == len(small_fit.rejections)
    assert "(rows " in reasons[0]


def test_rare_reasons_are_summed_up(small_fit):
    some = small_fit.rejections[0]
    many = tuple(replace(some, reason=f"reason {i}") for i in range(12) for _ in range(20 - i))
    shown = cli.summary(replace(small_fit, rejections=many))
    assert "20 reason 0 (rows" in shown
    assert "15 reason 5 (rows" in shown
    assert "69 for 6 other reasons, see the report" in shown


def test_much_set_aside_is_a_warning(small_fit):
    some = small_fit.rejections[0]
    tenth = small_fit.quotes_read // 10
    assert cli.doubts(replace(small_fit, rejections=tenth * (some,))) == []
    (text,) = cli.doubts(replace(small_fit, rejections=(tenth + 1) * (some,)))
    assert text.startswith("11 % of the quotes were set aside")


# ---------------------------------------------------------------- bad input


BAD_FILES = {
    "empty": ("", "empty"),
    "header only": (HEADER, ""),
    "misspelt column": (HEADER.replace("strike", "stirke"), "strike"),
    "binary": ("\x00\x01\x02\xff\n" * 5, ""),
    "no usable row": (HEADER + "2031-05-13,2031-05-12,4000,C,1,2\n", ""),
}


@pytest.mark.parametrize("name", BAD_FILES)
def test_bad_quote_files(tmp_path, capsys, name):
    text, naming = BAD_FILES[name]
    path = tmp_path / "quotes.csv"
    path.write_bytes(text.encode("latin-1"))
    status = cli.main(["fit", str(path), "--out", str(tmp_path / "out")])
    fails_in_one_line(status, capsys.readouterr().err, naming=naming)
    assert [p.name for p in tmp_path.iterdir()] == ["quotes.csv"]


def test_strict_names_the_row(quotes, tmp_path, capsys):
    text = quotes.read_text(encoding="utf-8").splitlines()
    bad = next(i for i, line in enumerate(text, start=1) if ",n/a," in line)
    status = cli.main(["fit", str(quotes), "--out", str(tmp_path / "out"), "--strict"])
    fails_in_one_line(status, capsys.readouterr().err, naming=f"row {bad}")
    assert not (tmp_path / "out").exists()


def test_bad_paths(quotes, tmp_path, monkeypatch, capsys):
    (tmp_path / "file").write_text("")

    def work(*arguments, **more):
        raise AssertionError("work before the check")

    monkeypatch.setattr("pyvolterra.quotes.read_quotes", work)
    monkeypatch.setattr(demo, "write_demo_quotes", work)
    for out, naming in (
        ("file", "not a folder"),
        ("missing/out", "does not exist"),
        ("file/out", "not a folder"),
    ):
        status = cli.main(["fit", str(quotes), "--out", str(tmp_path / out)])
        fails_in_one_line(status, capsys.readouterr().err, naming=naming)
        status = cli.main(["demo", "--out", str(tmp_path / out)])
        fails_in_one_line(status, capsys.readouterr().err, naming=naming)
    for path, naming in (("nowhere.csv", "does not exist"), (".", "is a folder")):
        status = cli.main(["fit", str(tmp_path / path), "--out", str(tmp_path / "out")])
        fails_in_one_line(status, capsys.readouterr().err, naming=naming)
    assert [p.name for p in tmp_path.iterdir()] == ["file"]


@pytest.mark.parametrize(
    ("words", "naming"),
    [
        ([], "COMMAND"),
        (["fit"], "QUOTES"),
        (["fit", "q.csv"], "--out"),
        (["fit", "q.csv", "--out", "x", "--mean-reversion", "-1"], "from 0 to 20"),
        (["fit", "q.csv", "--out", "x", "--mean-reversion", "nan"], "from 0 to 20"),
        (["fit", "q.csv", "--out", "x", "--mean-reversion", "20.5"], "from 0 to 20"),
        (["fit", "q.csv", "--out", "x", "--mean-reversion", "much"], "'much'"),
        (["fit", "", "--out", "x"], "QUOTES: is empty"),
        (["fit", "q.csv", "--out", " "], "--out: is empty"),
        (["demo", "--out", ""], "--out: is empty"),
        (["guess"], "guess"),
    ],
)
def test_bad_words(capsys, words, naming):
    with pytest.raises(SystemExit) as stopped:
        cli.main(words)
    fails_in_one_line(stopped.value.code, capsys.readouterr().err, naming=naming)


@pytest.mark.parametrize("code", [errno.EACCES, errno.ENOSPC, errno.EIO])
def test_errors_of_the_system_are_words_without_numbers(
    quotes, ready_fit, tmp_path, monkeypatch, capsys, code
):
    def fail(*arguments, **more):
        raise OSError(code, os.strerror(code), "folder/" + 200 * "long" + "/quotes.csv")

    monkeypatch.setattr("pyvolterra.quotes.read_quotes", fail)
    status = cli.main(["fit", str(quotes), "--out", str(tmp_path / "out")])
    err = capsys.readouterr().err
    words = os.strerror(code)
    fails_in_one_line(status, err, naming=f"quotes.csv': {words[0].lower()}{words[1:]}")
    assert "Errno" not in err
    assert len(err) < 200


def test_a_name_too_long_for_the_system(tmp_path, capsys):
    status = cli.main(["fit", 300 * "a" + ".csv", "--out", str(tmp_path / "out")])
    err = capsys.readouterr().err
    fails_in_one_line(status, err, naming="file name too long")
    assert "Errno" not in err


@pytest.mark.parametrize("command", ["fit", "demo"])
def test_without_matplotlib(quotes, tmp_path, monkeypatch, capsys, command):
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    words = [command, *([str(quotes)] if command == "fit" else []), "--out", str(tmp_path / "out")]
    status = cli.main(words)
    fails_in_one_line(
        status, capsys.readouterr().err, naming="matplotlib is missing, the report's pictures"
    )
    assert list(tmp_path.iterdir()) == []


def test_a_failing_fit_leaves_nothing(quotes, tmp_path, monkeypatch, capsys):
    def fail(*arguments, **more):
        raise pv.QuoteError("quotes\nof no\x1b[31m use")

    monkeypatch.setattr(calibration, "calibrate", fail)
    for out in (tmp_path / "new", tmp_path):
        status = cli.main(["fit", str(quotes), "--out", str(out)])
        err = capsys.readouterr().err
        fails_in_one_line(status, err, naming="quotes of no?[31m use")
    assert list(tmp_path.iterdir()) == []


# ---------------------------------------------------------------- interruption and progress


def test_interrupted_in_the_fit(quotes, tmp_path, monkeypatch, capsys):
    def stop(*arguments, **more):
        raise KeyboardInterrupt

    monkeypatch.setattr(calibration, "calibrate", stop)
    assert cli.main(["fit", str(quotes), "--out", str(tmp_path / "out")]) == 130
    assert capsys.readouterr().err == "pyvolterra: interrupted\n"
    assert list(tmp_path.iterdir()) == []


def test_interrupted_by_a_signal(tmp_path):
    words = [sys.executable, "-P", "-m", "pyvolterra", "demo", "--out", str(tmp_path / "out")]
    with subprocess.Popen(
        words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    ) as process:
        assert process.stdout.readline().startswith("invented quotes")
        process.send_signal(signal.SIGINT)
        _, err = process.communicate(timeout=120)
    assert process.returncode == 130
    assert "Traceback" not in err
    assert "pyvolterra: interrupted\n" in err
    assert {p.name for p in (tmp_path / "out").iterdir()} == {cli.DEMO_QUOTES}


class Terminal(io.StringIO):
    def isatty(self):
        return True


def test_progress_without_rich_is_one_line_that_is_wiped(monkeypatch):
    monkeypatch.setitem(sys.modules, "rich.console", None)
    terminal = Terminal()
    with cli._progress_line(terminal) as say:
        say("a line longer than any terminal " * 40)
        monkeypatch.setattr(cli.time, "monotonic", lambda: 1e12)
        say("short")
    written = terminal.getvalue()
    assert "\n" not in written
    assert "short" in written
    screen = ""
    for piece in written.split("\r"):  # what the terminal shows in the end
        screen = piece + screen[len(piece) :]
    assert screen.strip() == ""


def test_progress_with_rich_takes_text_literally():
    terminal = Terminal()
    with cli._progress_line(terminal) as say:
        say("reading [red]quotes.csv")
    assert "[red]quotes.csv" in terminal.getvalue()


def test_no_progress_without_a_terminal():
    plain = io.StringIO()
    with cli._progress_line(plain) as say:
        say("reading")
    assert plain.getvalue() == ""


@pytest.mark.filterwarnings("default")
def test_warnings_are_one_line_without_a_path(quotes, ready_fit, tmp_path, monkeypatch, capsys):
    import warnings

    def calibrate(*arguments, **more):
        warnings.warn("tolerance\nnot met", pv.AccuracyWarning, stacklevel=2)
        return ready_fit

    monkeypatch.setattr(calibration, "calibrate", calibrate)
    assert cli.main(["fit", str(quotes), "--out", str(tmp_path / "out")]) == 0
    assert capsys.readouterr().err == "pyvolterra: warning: tolerance not met\n"


def test_importing_the_command_line_is_light():
    code = (
        "import sys, pyvolterra.cli; "
        "print([m for m in ('matplotlib', 'pandas', 'scipy', 'rich') if m in sys.modules])"
    )
    shown = subprocess.run([sys.executable, "-P", "-c", code], capture_output=True, text=True)
    assert shown.stdout.strip() == "[]", shown.stderr
