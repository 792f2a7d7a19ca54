"""The cohort example: files and report of a short run; answers and resumption of long ones."""

import importlib
import json
import pathlib
import shutil
import signal
import subprocess
import sys
import time
import types
from typing import Any

import jax
import numpy as np
import pytest
import scipy.stats


FOLDER = pathlib.Path(__file__).parents[2] / "examples"
FILES = ("report.json", "attention.png", "cohort.png")


@pytest.fixture
def example(monkeypatch):
    monkeypatch.syspath_prepend(str(FOLDER))
    return importlib.import_module


def command(out, *arguments):
    return [sys.executable, str(FOLDER / "cohort_inference.py"), "--out", str(out), *arguments]


def run(out, *arguments):
    done = subprocess.run(command(out, *arguments), capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr[-2000:]
    print(done.stdout)
    return json.loads((out / "report.json").read_text())


@pytest.mark.long  # 28 s; `.ci/run` runs the same
def test_a_short_run_writes_all_that_it_promises(example, tmp_path, capsys):
    given = ["--out", str(tmp_path), "--slices", "4", "--rounds", "1", "--refits", "1"]
    with jax.numpy_dtype_promotion("standard"):  # optax's Adam mixes dtypes
        report = example("cohort_inference").main(given)
    assert json.loads((tmp_path / "report.json").read_text()) == report
    assert set(report) == {"input", "training", "slices", "certificate", "answer"}
    assert report["input"]["samples"] == 288 and report["input"]["slices"] == 4
    assert report["training"]["steps"] == 25 and report["training"]["resumed_at"] == 0
    assert [s["group"] for s in report["slices"]] == ["untreated", "treated"] * 2
    for s in report["slices"]:
        for key in ("growth", "coupling", "noise", "reading_noise"):
            assert s[key]["lower"] < s[key]["value"] < s[key]["upper"]
        assert len(s["period"]) == len(s["gain"]) == 3
        assert s["period"][0]["lower"] < s["period"][0]["value"] < s["period"][0]["upper"]
        assert s["status"].startswith("converged") and s["standard_errors_off"] <= 0.02
    sure = report["certificate"]
    assert sure["not_converged"] == []
    # Forty 90 percent intervals: fewer than 30 inside has a probability below 1 percent.
    assert sure["coverage_90"]["refined"]["all"] >= 0.75
    assert {"coupling", "growth", "level", "words"} == set(report["answer"])
    for png in FILES[1:]:
        assert (tmp_path / png).read_bytes()[:4] == b"\x89PNG"
    assert report["answer"]["words"] in capsys.readouterr().out


def test_group_means_are_those_of_a_random_effects_analysis(example):
    from statsmodels.stats.meta_analysis import combine_effects

    groups = example("group_comparison")
    generator = np.random.default_rng(0)
    variance = generator.uniform(0.5, 2.0, 12)
    value = 1 + generator.normal(size=12) * np.sqrt(variance + 3)
    mean = groups.group_mean(value, variance)
    expected: Any = combine_effects(value, variance, method_re="dl", use_t=True)
    assert mean.spread == pytest.approx(np.sqrt(expected.tau2), rel=1e-10)
    assert mean.value == pytest.approx(expected.mean_effect_re, rel=1e-10)
    assert mean.error == pytest.approx(max(expected.sd_eff_w_re_hksj, expected.sd_eff_w_re))
    # Errors of nothing leave a plain mean, and the difference is that of Welch's test.
    other = generator.normal(size=7)
    exact = [groups.group_mean(x, np.full(len(x), 1e-12)) for x in (value, other)]
    welch = scipy.stats.ttest_ind(value, other, equal_var=False).confidence_interval(0.9)
    np.testing.assert_allclose(groups.compare(*exact, level=0.9)[1:], welch, rtol=1e-6)


def test_words_follow_the_intervals(example):
    groups = example("group_comparison")
    down, none, up = (-0.2, -0.3, -0.1), (0.0, -0.1, 0.1), (0.2, 0.1, 0.3)
    assert "uncoupled the regions; no damping" in groups.words(down, none, up)
    assert "damped the cells; no uncoupling" in groups.words(none, down, down)
    assert "uncoupled the regions; it damped the cells" in groups.words(down, down, none)
    assert "no uncoupling is seen; no damping is seen" in groups.words(none, none, up)
    assert "oscillate by themselves" in groups.words(down, none, up)
    alone = groups.group_mean(np.ones(1), np.ones(1))
    unknown = groups.compare(alone, groups.group_mean(np.arange(3.0), np.ones(3)))
    assert groups.change(unknown) == "unknown"
    assert groups.words(unknown, none, none).startswith("Too few")


def test_a_file_that_is_no_checkpoint_is_refused_in_words(example, tmp_path):
    (tmp_path / "training.npz").write_bytes(b"no archive")
    module = example("cohort_inference")
    data = types.SimpleNamespace(times=0.5 * np.arange(8), mask=np.ones((4, 8, 3), bool))
    prior = module.model.beliefs(3, np.float32)
    with pytest.raises(SystemExit, match="choose another --out"):
        module.train(data, prior, module.parse(["--out", str(tmp_path)]))


@pytest.mark.long
def test_tells_uncoupling_from_damping(tmp_path):
    # The truth of the tray: coupling 0.02 or none, growth 0.04 or -0.02 per hour.
    uncoupled = run(tmp_path / "uncoupled")
    # Training has seen no recording, so the other tray needs no other.
    (tmp_path / "damped").mkdir()
    shutil.copy(tmp_path / "uncoupled" / "training.npz", tmp_path / "damped")
    damped = run(tmp_path / "damped", "--effect", "damped")
    assert damped["training"]["resumed_at"] == damped["training"]["steps"] == 1000
    for report, coupling, growth in ((uncoupled, -0.02, 0.0), (damped, 0.0, -0.06)):
        answer = report["answer"]
        assert answer["coupling"]["change"] == ("lowered" if coupling else "none seen")
        assert answer["growth"]["change"] == ("lowered" if growth else "none seen")
        for name, truth in (("coupling", coupling), ("growth", growth)):
            ends = answer[name]["difference"]
            assert ends["lower"] < truth < ends["upper"]
        assert len(report["certificate"]["not_converged"]) <= 1
        # Of 24 slices with a 1 percent level: more than two has a probability of 0.2 percent.
        assert len(report["certificate"]["not_white"]) <= 2
        covered = report["certificate"]["coverage_90"]["refined"]
        # 240 intervals, those of one slice correlated: a standard error of up to 3 percent.
        assert 0.84 <= covered["all"] <= 0.98
        # 24 intervals each: fewer than 18 has a probability of 1 percent.
        assert min(covered["growth"], covered["coupling"]) >= 0.75


@pytest.mark.long
def test_a_killed_run_ends_as_an_uninterrupted_one(tmp_path):
    given = ("--slices", "4", "--rounds", "3", "--refits", "1")
    whole = run(tmp_path / "whole", *given)
    out = tmp_path / "killed"
    begun = subprocess.Popen(
        command(out, *given), stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
    )
    until = time.monotonic() + 600
    while not (out / "training.npz").exists() and begun.poll() is None:
        assert time.monotonic() < until
        time.sleep(0.05)
    begun.send_signal(signal.SIGKILL)
    begun.wait()
    again = run(out, *given)
    assert again["training"].pop("resumed_at") in (25, 50)
    assert whole["training"].pop("resumed_at") == 0
    assert again == whole
    one, other = (np.load(tmp_path / name / "training.npz") for name in ("whole", "killed"))
    assert sorted(one.files) == sorted(other.files)
    assert all(np.array_equal(one[name], other[name]) for name in one.files)
