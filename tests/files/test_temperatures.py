"""Temperatures for degree-days from tables and series."""

from __future__ import annotations

import numpy as np
import pytest

from terrasol.errors import InputError, SettingError
from terrasol.files.temperatures import read_temperatures
from terrasol.practice.degree_days import winkler

DAYS = np.arange("2024-01-01", "2025-01-01", dtype="M8[D]")


def write(path, head, rows):
    path.write_text("\n".join([head, *rows]) + "\n")
    return path


def test_days_in_celsius_and_fahrenheit_are_the_same(tmp_path):
    c = write(tmp_path / "c.csv", "date,least_c,highest_c", [f"{d},10,25" for d in DAYS])
    f = write(tmp_path / "f.csv", "Date, least_F, highest_F", [f"{d},50,77" for d in DAYS])
    sums = [winkler(read_temperatures(path, 100.0)[0], 100.0, latitude=45.0) for path in (c, f)]
    assert sums[0] == pytest.approx(214 * 7.5)
    assert sums[1] == pytest.approx(sums[0])


@pytest.mark.parametrize("months", [range(1, 13), [f"2024-{m:02d}" for m in range(1, 13)]])
def test_months(tmp_path, months):
    path = write(tmp_path / "m.csv", f"{'month' if months[0] == 1 else 'date'},mean_c",
                 [f"{m},{k}" for k, m in enumerate(months)])  # fmt: skip
    found, _ = read_temperatures(path, 100.0)
    assert found.basis == "monthly mean"
    assert found.mean.tolist() == list(range(12))


def test_months_of_several_years_are_averaged(tmp_path):
    rows = [f"{y}-{m:02d},{m + (y - 2023)},{m + 5}" for y in (2023, 2024) for m in range(1, 13)]
    found, _ = read_temperatures(write(tmp_path / "m.csv", "date,mean_c,highest_c", rows), 0.0)
    assert found.mean.tolist() == [m + 0.5 for m in range(1, 13)]
    assert found.highest.tolist() == [m + 5.0 for m in range(1, 13)]


def test_an_hourly_series_gives_daily_extremes(tmp_path):
    hours = np.arange("2024-04-01T00", "2024-11-01T00", dtype="M8[h]")
    values = 15.0 - 8.0 * np.cos(2 * np.pi * hours.astype("M8[h]").astype(int) / 24.0)
    path = write(
        tmp_path / "s.csv", "time,t", [f"{h},{v:.3f}" for h, v in zip(hours, values, strict=True)]
    )
    (tmp_path / "s.csv.toml").write_text(
        '[place]\nlatitude = 45.0\nlongitude = 0.0\nheight = 200.0\n[time]\ncolumn = "time"\n'
        'zone = "UTC"\nlabel = "start"\n[columns.temperature]\ncolumn = "t"\nunit = "degC"\n'
    )
    found, _ = read_temperatures(path)
    assert found.height == 200.0
    assert np.allclose(found.mean, 15.0)
    assert np.allclose(found.highest, 23.0)
    with pytest.raises(SettingError, match="state the station's height"):
        read_temperatures(path, 200.0)


@pytest.mark.parametrize(
    ("head", "row", "words"),
    [
        ("date,temp", "2024-01-01,5", "no table of temperatures"),
        ("when,mean_c", "2024-01-01,5", "no table of temperatures"),
        ("date,mean_c", "1.5.2024,5", "'1.5.2024' is no date"),
        ("date,mean_c", "2024-01-01,warm", "no number"),
        ("date,mean_c", "2024-01-01,-999", "no air has"),
        ("date,mean_c", "2024-01-01,", "no value"),
        ("month,mean_c", "13,5", "1 to 12"),
        ("month,highest_c", "1,5", "need mean"),
    ],
)
def test_bad_tables_are_refused(tmp_path, head, row, words):
    with pytest.raises(InputError, match=rf"t\.csv: .*{words}"):
        read_temperatures(write(tmp_path / "t.csv", head, [row]), 100.0)


def test_no_height_and_no_file(tmp_path):
    path = write(tmp_path / "t.csv", "date,mean_c", ["2024-01-01,5"])
    with pytest.raises(SettingError, match="how high its station stands"):
        read_temperatures(path)
    with pytest.raises(InputError, match="cannot be read"):
        read_temperatures(tmp_path / "gone.csv", 5.0)
