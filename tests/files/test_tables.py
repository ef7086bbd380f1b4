"""Station files as people have them: right ones are read right, wrong ones say what is wrong."""

from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest
import xarray
from reference.made_station import made_station, write_table

import terrasol
from terrasol.errors import InputError, SettingError
from terrasol.files.tables import read_station

SHARED = Path(terrasol.__file__).resolve().parents[2] / "shared"
PLACE = {"latitude": 47.0, "longitude": 11.0, "height": 600.0}
SAID = PLACE | {"zone": "UTC", "label": "start", "column": "time"}
WATTS = {"columns": {"global": {"column": "global", "unit": "W/m2"}}}


@pytest.fixture(scope="module")
def station():
    return made_station("2024-03-01", 30)


@pytest.fixture
def text(tmp_path, station):
    """The lines of a good file, as a list to spoil; and how to read the spoilt one."""
    path = write_table(tmp_path / "good.csv", station)
    lines = path.read_text().splitlines()

    def read(changed, **said):
        spoilt = tmp_path / "spoilt.csv"
        spoilt.write_text("\n".join(changed) + "\n")
        return read_station(spoilt, **(SAID | WATTS | said))

    return lines, read


@pytest.mark.parametrize("label", ["start", "middle", "end"])
@pytest.mark.parametrize(("zone", "hours"), [("UTC", 0), ("+05:30", 5.5), ("-07:00", -7)])
def test_every_label_and_zone_gives_the_same_intervals(tmp_path, station, label, zone, hours):
    path = write_table(tmp_path / "a.csv", station, label=label, offset_hours=hours)
    read = read_station(path, **(SAID | WATTS | {"zone": zone, "label": label}))
    np.testing.assert_array_equal(read.start, station.start)
    assert read.seconds == 3600
    np.testing.assert_allclose(read.values["global"], station.values["global"], atol=5e-5)


@pytest.mark.parametrize("separator", [",", ";", "\t", "|"])
def test_separators_are_found(tmp_path, station, separator):
    path = write_table(tmp_path / "a.csv", station, separator=separator, comments=("of, a; kind",))
    read = read_station(path, **SAID, **WATTS)
    np.testing.assert_allclose(read.values["global"], station.values["global"], atol=5e-5)


def test_blanks_and_numbered_columns_without_a_header(tmp_path, station):
    form = "%Y  %m %d   %H %M"
    path = write_table(tmp_path / "a.txt", station, separator="  ", header=False, form=form)
    parts = {"year": 1, "month": 2, "day": 3, "hour": 4, "minute": 5}
    said = PLACE | parts | {"zone": "UTC", "label": "start"}
    read = read_station(path, **said, columns={"global": {"column": 6, "unit": "W m-2"}})
    np.testing.assert_array_equal(read.start, station.start)
    np.testing.assert_allclose(read.values["global"], station.values["global"], atol=5e-5)


def test_day_of_year_and_hour_24(tmp_path):
    hours = np.arange(48)
    rows = [f"2024,{60 + h // 24},{h % 24 + 1},{h}" for h in hours]
    path = tmp_path / "a.csv"
    path.write_text("\n".join(rows))
    parts = {"year": 1, "day_of_year": 2, "hour": 3}
    said = PLACE | parts | {"zone": "UTC", "label": "end"}
    columns = {"temperature": {"column": 4, "unit": "degC"}}
    read = read_station(path, **said, columns=columns)
    assert read.start[0] == np.datetime64("2024-02-29T00:00:00")
    np.testing.assert_array_equal(read.values["temperature"], hours)


def test_german_table_with_commas_and_24_hours(tmp_path):
    rows = ["Zeit;T"] + [f"{d:02d}.03.2024 {h:02d}:00;{h},5" for d in (1, 2) for h in range(1, 25)]
    path = tmp_path / "a.csv"
    path.write_text("\n".join(rows))
    read = read_station(
        path, **PLACE, zone="+01:00", label="end", column="Zeit", format="%d.%m.%Y %H:%M",
        decimal=",", columns={"temperature": {"column": "T", "unit": "°C"}},
    )  # fmt: skip
    assert read.start[0] == np.datetime64("2024-02-29T23:00:00")
    assert read.start.size == 48
    assert read.values["temperature"][23] == 24.5


def test_two_time_columns_are_joined(tmp_path, station):
    path = write_table(tmp_path / "a.csv", station, form="%d/%m/%Y,%H:%M", header=False)
    said = SAID | {"column": [1, 2], "format": "%d/%m/%Y %H:%M"}
    read = read_station(path, **said, columns={"global": {"column": 3, "unit": "W/m2"}})
    np.testing.assert_array_equal(read.start, station.start)


def test_toml_beside_the_file_and_options_that_win(tmp_path, station):
    path = write_table(tmp_path / "a.csv", station, label="end")
    (tmp_path / "a.csv.toml").write_text(
        """
        [place]
        name = "Hill"
        latitude = 47.0
        longitude = 11.0
        height = 600.0
        [time]
        column = "time"
        zone = "UTC"
        label = "end"
        interval = "1h"
        [columns.global]
        column = "global"
        unit = "W m-2"
        """
    )
    read = read_station(path)
    assert (read.name, read.latitude, read.height) == ("Hill", 47.0, 600.0)
    np.testing.assert_array_equal(read.start, station.start)
    other = read_station(path, label="start", height=700.0)
    assert other.height == 700.0
    np.testing.assert_array_equal(other.start, station.start + np.timedelta64(3600, "s"))
    given = read_station(path, tmp_path / "a.csv.toml")
    np.testing.assert_array_equal(given.start, station.start)


FACTORS = {"W/m2": 1.0, "kW/m2": 1e-3, "J/m2": 3600.0, "kJ/m2": 3.6, "MJ/m2": 3.6e-3,
           "J/cm2": 0.36, "Wh/m2": 1.0, "kWh/m2": 1e-3}  # fmt: skip
"""Numbers that stand for 1 W/m2 over an hour, by the meaning of the units."""


@pytest.mark.parametrize("unit", FACTORS)
def test_units_of_light(tmp_path, station, unit):
    path = write_table(tmp_path / "a.csv", station, factors={"global": 1e3 * FACTORS[unit]})
    thousandth = replace(station, values={"global": station.values["global"] * 1e3})
    columns = {"global": {"column": "global", "unit": unit}}
    read = read_station(path, **SAID, columns=columns, check_units=False)
    np.testing.assert_allclose(read.values["global"], thousandth.values["global"], atol=0.1)


@pytest.mark.parametrize(
    ("quantity", "unit", "number", "expected"),
    [
        ("temperature", "K", 283.15, 10.0),
        ("temperature", "°F", 50.0, 10.0),
        ("temperature", "celsius", 10.0, 10.0),
        ("precipitation", "kg/m2/s", 0.001, 3.6),
        ("precipitation", "inches", 0.5, 12.7),
        ("precipitation", "mm/h", 2.0, 2.0),
        ("albedo", "%", 55.0, 0.55),
        ("snow_water", "inch", 10.0, 254.0),
        ("snow_water", "kg m-2", 310.0, 310.0),
    ],
)
def test_other_units(tmp_path, quantity, unit, number, expected):
    rows = ["time,v"] + [f"2024-03-0{1 + h // 24}T{h % 24:02d}:00,{number}" for h in range(48)]
    path = tmp_path / "a.csv"
    path.write_text("\n".join(rows))
    read = read_station(path, **SAID, columns={quantity: {"column": "v", "unit": unit}})
    np.testing.assert_allclose(read.values[quantity], expected, rtol=1e-12)


def test_missing_rows_and_values_are_nan_and_told(tmp_path, station):
    holed = replace(station, values={"global": station.values["global"].copy()})
    holed.values["global"][[5, 60]] = np.nan
    path = write_table(tmp_path / "a.csv", holed, skip_rows=(100, 101), missing="-99.0")
    columns = {"global": {"column": "global", "unit": "W/m2", "missing": [-99]}}
    read = read_station(path, **SAID, columns=columns)
    assert set(np.flatnonzero(np.isnan(read.values["global"]))) == {5, 60, 100, 101}
    assert read.notes == ("a.csv: 2 of 720 intervals have no row: missing",)


def test_a_doubtful_interval_is_told_and_a_clear_one_is_not(tmp_path, station):
    columns = {"global": {"column": "global", "unit": "W/m2"}}
    path = write_table(tmp_path / "a.csv", station)
    assert read_station(path, **SAID, columns=columns).notes == ()
    # of six rows three are there: steps of one hour, of two and of three by turns
    gone = [row for row in range(720) if row % 6 in (2, 4, 5)]
    path = write_table(tmp_path / "b.csv", station, skip_rows=gone)
    notes = read_station(path, **SAID, columns=columns).notes
    assert notes[0].startswith("b.csv: the interval is taken as 3600 s")
    assert notes[0].endswith("but only 120 of 359 are so long: state it")
    stated = read_station(path, **SAID, columns=columns, interval="1h")
    assert stated.notes == ("b.csv: 358 of 718 intervals have no row: missing",)


def test_zones_without_daylight_saving(tmp_path, station):
    path = write_table(tmp_path / "a.csv", station, offset_hours=-5)
    read = read_station(path, **(SAID | WATTS | {"zone": "America/Bogota"}))
    np.testing.assert_array_equal(read.start, station.start)
    winter = replace(station, start=station.start - np.timedelta64(60 * 86400, "s"))
    path = write_table(tmp_path / "b.csv", winter, offset_hours=1)
    read = read_station(path, **(SAID | WATTS | {"zone": "Europe/Vienna", "check_units": False}))
    np.testing.assert_array_equal(read.start, winter.start)


def test_times_with_their_own_offset(tmp_path, station):
    path = write_table(tmp_path / "a.csv", station, offset_hours=2, form="%Y-%m-%dT%H:%M:%S+02:00")
    for zone in ("written", "+02:00"):
        read = read_station(path, **(SAID | WATTS | {"zone": zone}))
        np.testing.assert_array_equal(read.start, station.start)
    with pytest.raises(InputError, match=r"line 2: .*\+02:00.*stated zone '\+01:00'"):
        read_station(path, **(SAID | WATTS | {"zone": "+01:00"}))


# What is wrong must be said with the file, the line and the way out.


def test_unsorted(text):
    lines, read = text
    lines[7], lines[8] = lines[8], lines[7]
    with pytest.raises(InputError, match=r"spoilt\.csv: line 9: .* comes after .* sort"):
        read(lines)


def test_double_time(text):
    lines, read = text
    lines.insert(40, lines[39])
    with pytest.raises(InputError, match=r"spoilt\.csv: line 41: .* twice"):
        read(lines)


def test_text_in_numbers(text):
    lines, read = text
    lines[99] = lines[99].split(",")[0] + ",broken"
    with pytest.raises(InputError, match=r"line 100: 'broken' in column global is no number"):
        read(lines)


def test_lines_are_counted_with_comments_and_blanks(text):
    lines, read = text
    lines[99] = lines[99].split(",")[0] + ",broken"
    lines[3:3] = ["# a comment", "", "   "]
    with pytest.raises(InputError, match=r"line 103: 'broken'"):
        read(lines)


def test_short_row(text):
    lines, read = text
    lines[99] = lines[99].split(",")[0]
    with pytest.raises(InputError, match=r"line 100: 1 columns, but global is column 2"):
        read([*lines[:60], *lines[60:]], separator=",")


def test_all_missing(text):
    lines, read = text
    with pytest.raises(InputError, match="global has no value at all"):
        read([lines[0], *(line.split(",")[0] + "," for line in lines[1:])])


def test_future(text):
    lines, read = text
    year = datetime.now(UTC).year + 2
    with pytest.raises(InputError, match=f"line 2: {year}.* in the future"):
        read([lines[0], *(line.replace("2024-", f"{year}-") for line in lines[1:])])


def test_unreadable_time(text):
    lines, read = text
    lines[50] = "31.03.2024 noon,5"
    with pytest.raises(InputError, match=r"line 51: '31\.03\.2024 noon' is no time"):
        read(lines)


def test_irregular_steps(text):
    lines, read = text
    lines[50] = lines[50].replace(":00,", ":07,")
    with pytest.raises(InputError, match=r"line 51: .* irregular"):
        read(lines)


def test_no_whole_day(text):
    lines, read = text
    with pytest.raises(InputError, match="23 h long; a day"):
        read(lines[:24])


@pytest.mark.parametrize(
    ("stated", "written", "fits"),
    [
        ("W/m2", "kJ/m2", "kJ/m2"),
        ("kJ/m2", "W/m2", "W/m2 or Wh/m2"),
        ("kW/m2", "W/m2", "W/m2 or Wh/m2"),
        ("W/m2", "kW/m2", "kW/m2 or kWh/m2"),
        ("MJ/m2", "kWh/m2", "kW/m2 or kWh/m2"),
        ("J/m2", "kJ/m2", "kJ/m2"),
    ],
)
def test_units_wrong_by_a_thousand_or_3_6(tmp_path, stated, written, fits):
    station = made_station("2024-03-01", 60)
    path = write_table(tmp_path / "a.csv", station, factors={"global": FACTORS[written]})
    columns = {"global": {"column": "global", "unit": stated}}
    with pytest.raises(InputError, match=f"a.csv: .*cannot be in {stated}.*; {fits} would") as told:
        read_station(path, **SAID, columns=columns)
    assert str(told.value).startswith(f"{path}: global cannot be")  # the file is named once


def test_a_dull_week_is_no_wrong_unit(tmp_path):
    dull = made_station("2024-12-01", 7, clear_share=0.0, seed=5)
    low = replace(dull, values={"global": dull.values["global"] * 0.3})
    path = write_table(tmp_path / "a.csv", low)
    read = read_station(path, **SAID, **WATTS)
    np.testing.assert_allclose(read.values["global"], low.values["global"], atol=5e-5)


def test_kelvin_as_celsius(tmp_path):
    rows = ["time,v"] + [f"2024-03-0{1 + h // 24}T{h % 24:02d}:00,280" for h in range(48)]
    path = tmp_path / "a.csv"
    path.write_text("\n".join(rows))
    with pytest.raises(InputError, match="temperature cannot be in degC"):
        read_station(path, **SAID, columns={"temperature": {"column": "v", "unit": "degC"}})


def test_daylight_saving_is_refused_with_the_reason(text):
    lines, read = text
    with pytest.raises(InputError, match=r"changes its clock .*\+01:00 and \+02:00.*twice"):
        read(lines, zone="Europe/Vienna")


@pytest.mark.parametrize("key", ["zone", "label", "latitude", "longitude", "height"])
def test_what_must_be_stated(tmp_path, station, key):
    path = write_table(tmp_path / "a.csv", station)
    said = {name: value for name, value in SAID.items() if name != key}
    with pytest.raises(InputError, match=rf"a\.csv: {key} is not known: write {key} = .*toml"):
        read_station(path, **said, **WATTS)


def test_a_unit_must_be_stated(text):
    lines, read = text
    with pytest.raises(InputError, match="unit of global is not known"):
        read(lines, columns={"global": {"column": "global"}})


@pytest.mark.parametrize(
    ("toml", "says"),
    [
        ("[plase]\nlatitude = 1", r"'plase' is no known key; there are: place, time"),
        ("[place]\nlat = 1", r"'lat' in \[place\] is no known key; there are: name, latitude"),
        ("[columns.ghi]\ncolumn = 1", r"'ghi' in \[columns\] .* global, beam, diffuse"),
        ("[columns.global]\nunits = 'W'", r"'units' in \[columns.global\] .* column, unit"),
        ("[columns.global]\nunit = 'lux'", r"unit 'lux' is not known for global; .* MJ/m2"),
        ("[time]\nlabel = 'hour'", r"label = 'hour' must be start, middle or end"),
        ("[time]\nlabel = 3", r"label = 3 must be text"),
        ("[time]\ncolumn = 1\nyear = 1", r"both column and year"),
        ("[place]\nlatitude = 91", r"latitude = 91 is outside -90 to 90"),
        ("[place]\nheight = true", r"height = True must be a number"),
        ("place = 3", r"\[place\] must be a table"),
        ("[place", r"is no valid TOML"),
    ],
)
def test_settings_are_checked(tmp_path, station, toml, says):
    path = write_table(tmp_path / "a.csv", station)
    (tmp_path / "a.csv.toml").write_text(toml)
    with pytest.raises(InputError, match=r"a\.csv\.toml: .*" + says):
        read_station(path, **SAID, **WATTS)


def test_options_are_checked(tmp_path, station):
    path = write_table(tmp_path / "a.csv", station)
    with pytest.raises(SettingError, match=r"'lat' is no setting .* latitude"):
        read_station(path, lat=3)
    with pytest.raises(SettingError, match="label = 'begin' must be"):
        read_station(path, label="begin")
    with pytest.raises(
        InputError, match="column 'ghi' does not exist; there are: 'time', 'global'"
    ):
        read_station(path, **SAID, columns={"global": {"column": "ghi", "unit": "W/m2"}})
    with pytest.raises(InputError, match="interval 'soon' is not understood"):
        read_station(path, **SAID, **WATTS, interval="soon")


def test_a_column_beyond_the_row_makes_no_header(tmp_path, station):
    path = write_table(tmp_path / "a.csv", station, header=False)
    with pytest.raises(InputError, match=r"line 1: 2 columns, but global is column 9"):
        read_station(
            path, **(SAID | {"column": 1}), columns={"global": {"column": 9, "unit": "W/m2"}}
        )


def test_no_file(tmp_path):
    with pytest.raises(InputError, match=r"none\.csv: cannot be read"):
        read_station(tmp_path / "none.csv", **SAID, **WATTS)


# NetCDF


def dataset(station, label="end", bounds=True, **attributes):
    """A station as CF has it, times at the end of the intervals."""
    end = station.start + np.timedelta64(station.seconds, "s")
    edges = {"start": station.start, "end": end}
    variables = {
        "swd": (("time", "site"), station.values["global"][:, None] * 3600.0,
                {"units": "J m-2", "standard_name": "integral_wrt_time_of_"
                 "surface_downwelling_shortwave_flux_in_air"} | attributes),
        "lat": ((), 47.0, {"standard_name": "latitude"}),
        "lon": ((), 11.0, {"standard_name": "longitude"}),
        "alt": ((), 600.0, {"standard_name": "altitude"}),
    }  # fmt: skip
    if bounds:
        variables["time_bounds"] = (("time", "edge"), np.stack([station.start, end], 1))
    made = xarray.Dataset(variables, {"time": edges[label].astype("M8[ns]")})
    if bounds:
        made["time"].attrs["bounds"] = "time_bounds"
    made["time"].encoding["units"] = "seconds since 2024-01-01"
    return made


def test_netcdf_tells_units_place_label_and_interval(tmp_path, station):
    path = tmp_path / "a.nc"
    dataset(station).to_netcdf(path, engine="scipy")
    read = read_station(path, zone="UTC")
    assert (read.latitude, read.longitude, read.height) == (47.0, 11.0, 600.0)
    np.testing.assert_array_equal(read.start, station.start)
    np.testing.assert_allclose(read.values["global"], station.values["global"], rtol=1e-12)


def test_netcdf_without_bounds_needs_a_label(tmp_path, station):
    path = tmp_path / "a.nc"
    dataset(station, bounds=False).to_netcdf(path, engine="scipy")
    with pytest.raises(InputError, match="label is not known"):
        read_station(path, zone="UTC")
    with pytest.raises(InputError, match="zone is not known"):
        read_station(path, label="end")
    read = read_station(path, zone="UTC", label="end")
    np.testing.assert_array_equal(read.start, station.start)


def test_netcdf_label_against_bounds(tmp_path, station):
    path = tmp_path / "a.nc"
    dataset(station).to_netcdf(path, engine="scipy")
    with pytest.raises(InputError, match=r'at the end of their bounds .* label = "start"'):
        read_station(path, zone="UTC", label="start")


def test_netcdf_variables_by_name(tmp_path, station):
    path = tmp_path / "a.nc"
    dataset(station, standard_name="else").to_netcdf(path, engine="scipy")
    with pytest.raises(InputError, match="no variable has a standard name"):
        read_station(path, zone="UTC")
    with pytest.raises(InputError, match=r"no variable 'ghi'; there are: swd$"):
        read_station(path, zone="UTC", columns={"global": {"column": "ghi"}})
    read = read_station(path, zone="UTC", columns={"global": {"column": "swd"}})
    np.testing.assert_allclose(read.values["global"], station.values["global"], rtol=1e-12)


# Measured data


@pytest.mark.skipif(not (SHARED / "data/coldeporte").is_dir(), reason="no measured data beside")
def test_col_de_porte():
    """Morin et al. (2012), doi:10.1594/PANGAEA.774249: blanks, year month day hour, K, kg/m2/s."""
    path = SHARED / "data/coldeporte/met_CdP_0506.txt"
    read = read_station(
        path, latitude=45.30, longitude=5.77, height=1325.0, zone="UTC", label="end",
        year=1, month=2, day=3, hour=4,
        columns={
            "global": {"column": 5, "unit": "W/m2"},
            "temperature": {"column": 9, "unit": "K"},
            "precipitation": {"column": 8, "unit": "kg/m2/s"},
        },
    )  # fmt: skip
    plain = np.loadtxt(path)
    assert read.start[0] == np.datetime64("2005-09-30T23:00:00")
    assert read.start.size == plain.shape[0] == 6552
    np.testing.assert_array_equal(read.values["global"], plain[:, 4])
    np.testing.assert_allclose(read.values["temperature"], plain[:, 8] - 273.15)
    np.testing.assert_allclose(read.values["precipitation"], plain[:, 7] * 3600.0)


def air_of_winter(path, fahrenheit):
    """Forty invented winter days at the place of `SAID`, 0 degC in the mean."""
    rows = ["time,A"]
    for hour in range(40 * 24):
        air = 5.0 * np.sin((hour - 9) * np.pi / 12.0)
        moment = np.datetime64("2024-01-10T00:00") + np.timedelta64(hour, "h")
        rows.append(f"{moment},{1.8 * air + 32.0 if fahrenheit else air:.2f}")
    path.write_text("\n".join(rows) + "\n")
    return path


def test_air_in_degrees_fahrenheit_that_are_not_stated_is_refused(tmp_path):
    said = SAID | {"columns": {"temperature": {"column": "A", "unit": "degC"}}}
    path = air_of_winter(tmp_path / "air.csv", fahrenheit=True)
    with pytest.raises(
        InputError, match=r"air\.csv: temperature cannot be in degC.*degF would fit"
    ):
        read_station(path, **said)
    mended = said | {"columns": {"temperature": {"column": "A", "unit": "degF"}}}
    assert read_station(path, **mended).values["temperature"].mean() == pytest.approx(0.0, abs=0.01)
    assert read_station(path, **said, check_units=False).values["temperature"].mean() > 30.0
    real = air_of_winter(tmp_path / "real.csv", fahrenheit=False)
    assert read_station(real, **said).values["temperature"].mean() == pytest.approx(0.0, abs=0.01)
