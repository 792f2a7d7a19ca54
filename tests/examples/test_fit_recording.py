"""The main job: on the built-in tray, on real recordings, and on files it cannot use."""

import json
import pathlib
import subprocess
import sys
from importlib import resources
from typing import Any

import numpy as np
import pytest


EXAMPLE = pathlib.Path(__file__).parents[2] / "examples" / "fit_recording.py"


def run(*arguments, out):
    command = [sys.executable, str(EXAMPLE), "--out", str(out), *map(str, arguments)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr[-2000:]
    print(done.stdout)
    return json.loads((out / "report.json").read_text())


def save(path, header, columns):
    np.savetxt(path, np.stack(columns, axis=1), delimiter=",", header=header, comments="")
    return path


def better(forecast, rival):
    return np.array(forecast["model"]) < np.array(forecast[rival])


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "is empty"),
        ("time,glow\n0,1\n1,two\n", "two"),
        ("time,glow\n0,1\n0,2\n", "increase strictly"),
    ],
)
def test_a_file_it_cannot_use_is_refused_in_words(tmp_path, text, words):
    file = tmp_path / "bad.csv"
    file.write_text(text)
    command = [sys.executable, str(EXAMPLE), "--csv", str(file), "--out", str(tmp_path)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 1
    assert "cannot fit" in done.stderr and words in done.stderr
    assert "Traceback" not in done.stderr


@pytest.mark.long
def test_built_in_tray(tmp_path):
    import jax

    from oscillib.demo import tray

    report = run(out=tmp_path)
    truth = 2 * np.pi / np.asarray(tray(key=jax.random.key(0)).params.field.frequency)
    inside = [
        u["period"]["lower"] < t < u["period"]["upper"]
        for u, t in zip(report["units"], truth, strict=True)
    ]
    # Six 90 percent intervals: fewer than four inside has a probability of 1.6 percent.
    assert sum(inside) >= 4
    assert not any(report["windows"]["collapsed"])
    assert better(report["forecast"], "time_average").all()
    assert better(report["forecast"], "persistence").all()
    assert (tmp_path / "fit.png").stat().st_size > 10_000


@pytest.mark.long
def test_yearly_sunspots(tmp_path):
    # Yearly sunspot numbers 1700-2008, shipped with statsmodels (public domain); the cycle of about
    # 11 years: common practice, no source.
    import statsmodels.api as sm

    data: Any = sm.datasets.sunspots.load_pandas().data
    file = save(tmp_path / "s.csv", "year,number", [data.YEAR, data.SUNACTIVITY])
    report = run("--csv", file, "--holdout", 0.5, "--horizon", 10, out=tmp_path)
    assert 10.2 < report["units"][0]["period"]["value"] < 11.6
    assert 10.2 < report["units"][0]["observed_period"] < 11.6
    assert better(report["forecast"], "time_average").all()
    assert better(report["forecast"], "persistence").all()


@pytest.mark.long
def test_monthly_sea_surface_temperature(tmp_path):
    # Four Pacific regions, monthly 1950-2016, shipped with PyWavelets (data NOAA, public domain).
    table = np.load(str(resources.files("pywt") / "data" / "sst_nino3.npz"))["data"]
    months = np.arange(len(table))
    header = "month,region 1+2,region 3,region 4,region 3.4"
    file = save(tmp_path / "s.csv", header, [months, *table[:, [2, 4, 6, 8]].T])
    report = run("--csv", file, "--horizon", 12, out=tmp_path)
    periods = [unit["observed_period"] for unit in report["units"]]
    for k in (0, 1, 3):  # region 4 has hardly a yearly cycle
        assert abs(periods[k] / 12 - 1) < 0.01


@pytest.mark.long
def test_hourly_temperature_of_two_cities(tmp_path):
    # Hourly temperatures of 2010, shipped with vega_datasets (data NOAA, public domain).
    folder = resources.files("vega_datasets") / "_data"
    cities = []
    for name in ("sf-temps.csv", "seattle-temps.csv"):
        rows = (folder / name).read_text().splitlines()
        place = rows[0].split(",").index("temp")
        cities.append(np.array([float(row.split(",")[place]) for row in rows[1:]]))
    hours = np.arange(len(cities[0]))
    file = save(tmp_path / "t.csv", "hour,San Francisco,Seattle", [hours, *cities])
    report = run("--csv", file, "--horizon", 48, out=tmp_path)
    for unit in report["units"]:
        assert abs(unit["period"]["value"] / 24 - 1) < 0.01
