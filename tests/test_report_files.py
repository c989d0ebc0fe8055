"""fit.json and residuals.csv, and how the files of a report reach the disk."""

import csv
import io
import math
import os
from dataclasses import replace

import numpy as np
import pytest
from reported_fits import strict_json

import pyvolterra as pv
from pyvolterra import black
from pyvolterra.report import figures, files, write_report


def test_fit_json_carries_the_fit(demo_fit, demo_report):
    document = strict_json(demo_report["fit.json"])
    assert (document["format"], document["format_version"]) == ("pyvolterra fit", 1)
    assert document["parameters"] == demo_fit.parameters
    assert document["standard_errors"] == demo_fit.standard_errors
    np.testing.assert_array_equal(document["covariance"]["matrix"], demo_fit.covariance)
    assert document["quote_fingerprint_sha256"] == demo_fit.fingerprint
    assert document["quote_time"] == "2031-05-13T15:30:00Z"
    assert {"pyvolterra", "numpy", "scipy", "python"} <= set(document["versions"])
    quality = document["quality"]
    assert quality["quotes_fitted"] == sum(e["quotes"] for e in quality["by_expiry"])
    assert sum(entry["count"] for entry in document["set_aside"]) == len(demo_fit.rejections)
    # enough to build the fitted model again
    p, curve = document["parameters"], document["forward_variance"]
    kernel = pv.FractionalKernel(p["hurst"])
    rebuilt = pv.ForwardVariance.driven(
        kernel, curve["initial_variance"], curve["times"], curve["levels"], p["mean_reversion"]
    )
    assert rebuilt == demo_fit.model.forward_variance


def test_fit_json_has_null_for_what_is_no_number(demo_fit):
    errors = dict.fromkeys(demo_fit.standard_errors, math.nan)
    case = replace(demo_fit, standard_errors=errors, elapsed=math.inf)
    document = strict_json(files.fit_json(case))
    assert set(document["standard_errors"].values()) == {None}
    assert document["seconds"] is None


def test_residuals_point_back_to_the_file(demo_fit, demo_report, demo_file):
    with open(demo_file, newline="", encoding="utf-8") as file:
        source = dict(enumerate(csv.DictReader(file), start=2))
    rows = list(csv.DictReader(io.StringIO(demo_report["residuals.csv"].decode("utf-8"))))
    assert len(rows) == demo_fit.residuals.size
    forwards = {str(p.expiry) + "Z": p for p in demo_fit.forwards.points}
    for row in rows:
        quote, point = source[int(row["row"])], forwards[row["expiry"]]
        assert quote["expiry"] == row["expiry"]
        assert float(quote["strike"]) == float(row["strike"])
        assert quote["option_type"] == row["side"][0].upper()
        for side in ("bid", "ask"):  # the volatility reprices the quote
            price = black.price(
                point.forward,
                float(row["strike"]),
                point.maturity,
                float(row[f"{side}_volatility"]),
                discount=point.discount,
                call=row["side"] == "call",
            )
            assert price == pytest.approx(float(quote[side]), abs=1e-3)
        gap = float(row["model_volatility"]) - float(row["mid_volatility"])
        assert float(row["residual_bp"]) == pytest.approx(1e4 * gap, abs=1e-2, rel=1e-3)
    inside = [row["inside_bid_ask"] == "yes" for row in rows]
    assert np.mean(inside) == demo_fit.share_inside_bid_ask


# ---------------------------------------------------------------- writing


def names(folder):
    return sorted(p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file())


def test_write_report_replaces_an_older_one_and_nothing_else(two_expiries, tmp_path):
    folder = tmp_path / "out"
    (folder / "smiles").mkdir(parents=True)
    (folder / "smiles" / "smile-1999-01-01.png").write_bytes(b"of an older fit")
    (folder / "smiles" / "mine.png").write_bytes(b"mine")
    (folder / "fit.json").write_text("older")
    page = write_report(two_expiries, folder)
    assert page == folder / "report.html"
    left = names(folder)
    assert "smiles/mine.png" in left
    assert "smiles/smile-1999-01-01.png" not in left
    assert not [name for name in left if ".part" in name]
    strict_json((folder / "fit.json").read_bytes())
    assert len(left) == 1 + 2 + 4 + 3


@pytest.mark.parametrize("failing", ["fsync", "replace"])
def test_a_failed_write_leaves_the_folder_as_it_was(tmp_path, monkeypatch, failing):
    def fail(*arguments):
        raise OSError("no space left on device")

    folder = tmp_path / "out"
    monkeypatch.setattr(files.os, failing, fail)
    with pytest.raises(OSError, match="no space"):
        files.write_files(folder, {"a.txt": b"a", "smiles/b.txt": b"b"})
    assert not folder.exists()
    folder.mkdir()
    (folder / "a.txt").write_bytes(b"older")
    with pytest.raises(OSError, match="no space"):
        files.write_files(folder, {"a.txt": b"a", "smiles/b.txt": b"b"})
    assert names(folder) == ["a.txt"]
    assert (folder / "a.txt").read_bytes() == b"older"


def test_a_folder_in_the_way_is_found_before_anything_is_replaced(tmp_path):
    (tmp_path / "b.txt").mkdir()
    (tmp_path / "a.txt").write_bytes(b"older")
    with pytest.raises(IsADirectoryError, match=r"b\.txt"):
        files.write_files(tmp_path, {"a.txt": b"a", "b.txt": b"b"})
    assert (tmp_path / "a.txt").read_bytes() == b"older"
    assert names(tmp_path) == ["a.txt"]


def test_a_failing_picture_leaves_nothing(two_expiries, tmp_path, monkeypatch):
    def fail(*arguments, **more):
        raise RuntimeError("cannot draw")

    monkeypatch.setattr(figures, "smile_picture", fail)
    with pytest.raises(RuntimeError, match="cannot draw"):
        write_report(two_expiries, tmp_path / "out")
    assert names(tmp_path) == []


def test_check_folder(tmp_path, monkeypatch):
    files.check_folder(tmp_path)
    files.check_folder(tmp_path / "new")
    assert not (tmp_path / "new").exists()
    (tmp_path / "file").write_text("")
    with pytest.raises(NotADirectoryError, match="not a folder"):
        files.check_folder(tmp_path / "file")
    with pytest.raises(NotADirectoryError, match="parent"):
        files.check_folder(tmp_path / "file" / "out")
    with pytest.raises(FileNotFoundError, match="does not exist"):
        files.check_folder(tmp_path / "missing" / "out")
    monkeypatch.setattr(os, "access", lambda *a: False)  # root may write anywhere
    with pytest.raises(PermissionError, match="not writable"):
        files.check_folder(tmp_path)
    with pytest.raises(PermissionError, match=r"parent .* is not writable"):
        files.check_folder(tmp_path / "new")
