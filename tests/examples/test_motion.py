"""The benchmark on real recordings of people moving, in its short setting."""

import importlib.util
import json
import pathlib
import subprocess
import sys

import numpy as np
import pytest


SCRIPT = pathlib.Path(__file__).parents[2] / "benchmarks" / "motion"


@pytest.mark.long
@pytest.mark.skipif(importlib.util.find_spec("aeon") is None, reason="needs the extra `motion`")
def test_activities_from_one_pass(tmp_path):
    # BasicMotions of the UEA/UCR archive, shipped with aeon: 80 recordings, 20 of each activity.
    out = tmp_path / "motion.json"
    command = [sys.executable, str(SCRIPT), "--quick", "--out", str(out)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr[-2000:]
    print(done.stdout)
    report = json.loads(out.read_text())
    assert report["majority"] == 0.25
    # Training on simulations alone must say something of recordings that it never saw.
    fit = report["fit"]
    assert fit["prior's mean"] < fit["parameters, one pass"] < fit["parameters, refined"]
    assert report["explained"]["frequency"] > 0.6
    for title in ("recordings as they are", "recordings in their own units"):
        scores = report[title]
        assert all(np.isfinite(list(row.values())).all() for row in scores.values())
        # A coin of four sides is beaten by far more than the binomial spread of 80 tosses, 0.05;
        # which features are best is not asserted: the table says it.
        assert scores["parameters, one pass"]["accuracy"] > 0.6
        assert scores["parameters, one pass"]["log_loss"] < np.log(4)
