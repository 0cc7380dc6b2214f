"""Tables of flares: what is read, in every form it may come in, and what is written."""

from pathlib import Path

import numpy as np
import pytest
from astropy import constants, units
from astropy.table import Table
from astropy.time import Time

from emu.errors import UserError
from emu.observe.flare import Flare, read_flare, read_flares, write_flares
from emu.observe.rows import KINDS, Rows
from emu.units import Target

TARGET = Target("invented", 5.0e6, 9.0)
MINUTES = np.array([0.0, 2.0, 4.0, 6.0, 30.0])
WHAT = ["flux", "q", "u", "east", "flux"]
VALUE = np.array([1.5, 0.1, -0.2, 40.0, 2.0])
ERROR = np.array([0.1, 0.02, 0.02, 30.0, 0.1])
UNITS = {"flux": "mJy", "q": "", "u": "", "east": "uas"}


def write_ecsv(path: Path, time: object, **meta: object) -> Path:
    columns = {"time": time, "what": WHAT, "value": VALUE, "error": ERROR}
    table = Table(columns, meta={"units": UNITS, **meta})
    table.write(path, format="ascii.ecsv")
    return path


def write_text(path: Path, text: str) -> Path:
    path.write_text(text)
    return path


def test_minutes_in_ecsv(tmp_path: Path) -> None:
    flare = read_flare(write_ecsv(tmp_path / "a.ecsv", MINUTES * units.min, flare="first"))
    assert (flare.name, flare.flux_unit, flare.t_ref) == ("first", "mJy", "15 min")
    np.testing.assert_allclose(flare.seconds, 60.0 * (MINUTES - 15.0), rtol=1e-14)
    assert [KINDS[code] for code in flare.kind] == WHAT
    np.testing.assert_array_equal(flare.value, VALUE)
    np.testing.assert_array_equal(flare.error, ERROR)


# Every format is astropy's own; the seconds must come out the same as from plain minutes.
@pytest.mark.parametrize("layout", ["jd", "mjd", "unix", "gps", "decimalyear", "jyear", "iso", "yday"])
@pytest.mark.parametrize("scale", ["utc", "tai", "tt", "tdb"])
def test_absolute_times_in_any_format(tmp_path: Path, layout: str, scale: str) -> None:
    start = Time("2024-03-04T23:50:00", scale=scale)
    stamp = start + MINUTES * units.min
    cells = getattr(Time(stamp, precision=9), layout)
    path = write_ecsv(tmp_path / "a.ecsv", cells, time_format=layout, time_scale=scale)
    # 2,024 years in one float64 are good to 7e-6 s (2^-43 of a year), days since JD 0 to 4e-5 s.
    np.testing.assert_allclose(read_flare(path).seconds, 60.0 * (MINUTES - 15.0), atol=1e-4)


def test_time_column_of_astropy_itself(tmp_path: Path) -> None:
    stamp = Time(60000.5, format="mjd", scale="tdb") + MINUTES * units.min
    flare = read_flare(write_ecsv(tmp_path / "a.ecsv", stamp))
    np.testing.assert_allclose(flare.seconds, 60.0 * (MINUTES - 15.0), atol=1e-6)
    assert flare.t_ref == "2023-02-25T12:15:00.000"


def test_leap_second_counts(tmp_path: Path) -> None:
    # The last leap second so far ended 2016 (IERS Bulletin C 52).
    night = ["2016-12-31T23:50:00", "2016-12-31T23:59:59"]
    stamps = [*night, *(f"2017-01-01T00:{minute}:00" for minute in ("00", "05", "10"))]
    seconds = read_flare(write_ecsv(tmp_path / "a.ecsv", stamps)).seconds
    np.testing.assert_allclose(np.diff(seconds), [599.0, 2.0, 300.0, 300.0], atol=1e-6)


def test_units_of_the_columns(tmp_path: Path) -> None:
    columns = {"time": [0.0, 10.0, 20.0], "what": ["flux"] * 3, "value": [1.0, 2.0, 3.0], "error": [10.0] * 3}
    table = Table(columns, units={"time": "min", "value": "Jy", "error": "mJy"})
    table.write(tmp_path / "a.ecsv", format="ascii.ecsv")
    flare = read_flare(tmp_path / "a.ecsv")
    np.testing.assert_allclose(flare.seconds, [-600.0, 0.0, 600.0], atol=1e-9)
    assert flare.flux_unit == "Jy"
    np.testing.assert_allclose(flare.error, 0.01)


def test_years_to_come(tmp_path: Path) -> None:
    # Nobody knows their leap seconds; a warning (an error in these tests) would help nobody.
    stamps = [f"2091-05-04T01:{minute:02}:00" for minute in (0, 2, 4, 6, 30)]
    flare = read_flare(write_ecsv(tmp_path / "a.ecsv", stamps))
    np.testing.assert_allclose(flare.seconds, 60.0 * (MINUTES - 15.0), atol=1e-6)


@pytest.mark.parametrize(
    ("t_ref", "first"), [(10.0, -600.0), ({"a": 10.0, "b": 3.0}, -600.0), ({"b": 3.0}, -900.0)]
)
def test_t_ref_of_the_metadata(tmp_path: Path, t_ref: object, first: float) -> None:
    flare = read_flare(write_ecsv(tmp_path / "a.ecsv", MINUTES * units.min, t_ref=t_ref))
    assert flare.seconds[0] == pytest.approx(first)


def test_absolute_t_ref_and_zero_point(tmp_path: Path) -> None:
    stamp = (Time("2024-03-04T00:00:00") + MINUTES * units.min).isot
    flare = read_flare(write_ecsv(tmp_path / "a.ecsv", stamp, t_ref="2024-03-04T00:10:00"))
    assert (flare.seconds[0], flare.t_ref) == (pytest.approx(-600.0), "2024-03-04T00:10:00.000")
    flare = read_flare(write_ecsv(tmp_path / "b.ecsv", MINUTES * units.min, time_zero="2024-03-04T00:00:00"))
    assert flare.t_ref == "2024-03-04T00:15:00.000"


def test_units_are_converted(tmp_path: Path) -> None:
    rows = "0,flux,1,0.1\n9,Q,200,10\n18,q,5,1\n27,east,1,2\n"
    path = write_text(tmp_path / "a.csv", "time,what,value,error\n" + rows)
    columns = write_text(
        tmp_path / "map.toml",
        '[units]\ntime = "min"\nflux = "Jy"\nQ = "mJy"\nq = "percent"\neast = "1e-3 arcsec"\n',
    )
    flare = read_flare(path, columns)
    np.testing.assert_allclose(flare.value, [1.0, 0.2, 0.05, 1000.0])
    np.testing.assert_allclose(flare.error, [0.1, 0.01, 0.01, 2000.0])


def test_geometric_rows_against_the_constants(tmp_path: Path) -> None:
    flare = read_flare(write_ecsv(tmp_path / "a.ecsv", MINUTES * units.min))
    rows = flare.rows(TARGET, "Jy")
    # GM/c^3 and GM/c^2 over the distance, written out with astropy's constants.
    mass = TARGET.mass * constants.GM_sun
    second = (mass / constants.c**3).to_value(units.s)
    micro = (mass / constants.c**2 / (TARGET.distance * units.kpc)).to_value(
        units.uas, equivalencies=units.dimensionless_angles()
    )
    np.testing.assert_allclose(rows.time, 60.0 * (MINUTES - 15.0) / second, rtol=1e-9)
    np.testing.assert_allclose(rows.value, [1.5e-3, 0.1, -0.2, 40.0 / micro, 2.0e-3], rtol=1e-9)
    np.testing.assert_allclose(rows.error[3], 30.0 / micro, rtol=1e-9)
    assert rows.value[0] == flare.rows(TARGET).value[0] / 1000.0


def test_target_of_the_table_wins(tmp_path: Path) -> None:
    own = {"name": "heavy", "mass": 5.0e7, "distance": 9.0}
    flare = read_flare(write_ecsv(tmp_path / "a.ecsv", MINUTES * units.min, target=own))
    assert flare.target == Target("heavy", 5.0e7, 9.0)
    assert np.ptp(flare.rows(TARGET).time) == pytest.approx(1800.0 / flare.target.time_unit)
    labelled = read_flare(write_ecsv(tmp_path / "b.ecsv", MINUTES * units.min, target="only a label"))
    assert labelled.target is None


def test_numbers_without_a_sign_in_the_exponent_are_numbers_in_a_target(tmp_path: Path) -> None:
    plain = {"name": "x", "mass": 1, "distance": 9}
    path = write_ecsv(tmp_path / "a.ecsv", MINUTES * units.min, target=plain)
    path.write_text(path.read_text().replace("mass: 1", "mass: 5.0e6"))  # YAML 1.1: a text
    assert read_flare(path).target == Target("x", 5.0e6, 9.0)


TWO = """time,what,value,error,flare
0,flux,1,0.1,1
1,flux,1,0.1,2
5,flux,1.1,0.1,1
9,flux,1.2,0.1,2
12,flux,1.3,0.1,1
19,flux,1.4,0.1,2
"""
IN_MINUTES = '[units]\ntime = "min"\nflux = "mJy"\n'


def test_several_flares_a_table(tmp_path: Path) -> None:
    path, columns = write_text(tmp_path / "two.csv", TWO), write_text(tmp_path / "map.toml", IN_MINUTES)
    first, second = read_flares(path, columns)
    assert (first.name, second.name) == ("1", "2")
    np.testing.assert_allclose(second.seconds, [-540.0, -60.0, 540.0])
    assert read_flares(path, columns, ["2"])[0].name == "2"
    with pytest.raises(UserError, match="has no flare 7; it has 1, 2"):
        read_flares(path, columns, ["7"])
    with pytest.raises(UserError, match="holds 2 flares"):
        read_flare(path, columns)


def test_headers_of_other_people(tmp_path: Path) -> None:
    path = write_text(tmp_path / "a.csv", "T,Stokes,V,dV\n1,Q/I,0.1,0.02\n5,U/I,0.2,0.02\n9,I,3,0.1\n")
    columns = write_text(
        tmp_path / "map.toml",
        'flare = "theirs"\n[columns]\ntime = "T"\nwhat = "Stokes"\nvalue = "V"\nerror = "dV"\n'
        '[what]\n"Q/I" = "q"\n"U/I" = "u"\nI = "flux"\n' + IN_MINUTES,
    )
    flare = read_flare(path, columns)
    assert flare.name == "theirs"
    assert [KINDS[code] for code in flare.kind] == ["q", "u", "flux"]


def test_one_row_a_time(tmp_path: Path) -> None:
    path = write_text(tmp_path / "a.csv", "t,F,eF,q,eq\n0,1,.1,.3,.01\n5,2,.1,,\n10,3,.1,.2,.01\n")
    columns = write_text(
        tmp_path / "map.toml",
        '[columns]\ntime = "t"\n[measured.flux]\nvalue = "F"\nerror = "eF"\n[measured.q]\nvalue = "q"\n'
        'error = "eq"\n' + IN_MINUTES,
    )
    flare = read_flare(path, columns)
    assert [KINDS[code] for code in flare.kind] == ["flux", "q", "flux", "flux", "q"]
    np.testing.assert_allclose(flare.value, [1, 0.3, 2, 3, 0.2])
    path.write_text(path.read_text().replace("2,.1,,", "2,.1,.2,"))
    with pytest.raises(UserError, match=r"a.csv, row 2: error of q is empty or NaN"):
        read_flare(path, columns)


def test_written_flares_read_back_the_same(tmp_path: Path) -> None:
    rng = np.random.default_rng(4)

    def flare(name: str) -> Flare:
        return Flare(
            name=name, seconds=np.sort(rng.uniform(-2000, 2000, 7)),
            kind=np.arange(7, dtype=np.int8), value=rng.normal(0, 0.1, 7), error=rng.uniform(0.01, 0.02, 7),
            flux_unit="mJy", t_ref="2031-01-01T00:00:00.000", where="", target=TARGET,
        )  # fmt: skip

    flares = [flare("a"), flare("b")]
    truth = {"a": {"spin": 0.3}, "b": {"spin": -0.1}}
    write_flares(tmp_path / "out.ecsv", flares, truth=truth, origin="invented")
    for before, after in zip(flares, read_flares(tmp_path / "out.ecsv"), strict=True):
        for column in ("seconds", "kind", "value", "error"):
            np.testing.assert_array_equal(getattr(before, column), getattr(after, column))
        assert (after.name, after.t_ref) == (before.name, before.t_ref)
        assert (after.flux_unit, after.target) == ("mJy", TARGET)
    assert Table.read(tmp_path / "out.ecsv").meta["truth"]["b"]["spin"] == -0.1


SIMULATED = Rows(
    time=np.array([-50.0, 0.0, 50.0]),
    kind=np.array([0, 5, 6], dtype=np.int8),
    value=np.array([1.0, 3.0, -4.0]),
    error=np.array([0.1, 2.0, 2.0]),
)


def test_rows_and_flares_convert_both_ways() -> None:
    back = Flare.from_rows(SIMULATED, TARGET, "simulated", "mJy").rows(TARGET)
    for column in ("time", "kind", "value", "error"):
        np.testing.assert_allclose(getattr(back, column), getattr(SIMULATED, column), rtol=1e-14)


def test_tables_that_do_not_fit_together_are_not_written(tmp_path: Path) -> None:
    one = Flare.from_rows(SIMULATED, TARGET, "x", "mJy")
    other = Flare.from_rows(SIMULATED, TARGET, "y", "Jy")
    wrong = (((), "no flares"), ((one, one), "share a name"), ((one, other), "need a table each"))
    for flares, reason in wrong:
        with pytest.raises(UserError, match=reason):
            write_flares(tmp_path / "out.ecsv", flares)
