"""What is refused, and that each refusal is one line that names file, row and cure."""

from pathlib import Path

import pytest

from emu.errors import UserError
from emu.observe.flare import Flare, read_flare
from emu.observe.gather import gather
from emu.units import Target

HEAD = """# %ECSV 1.0
# ---
# datatype:
# - {name: time, unit: min, datatype: float64}
# - {name: what, datatype: string}
# - {name: value, datatype: float64}
# - {name: error, datatype: float64}
# meta: !!omap
# - units: {flux: mJy, q: '', u: '', east: uas, evpa: deg, polarised_fraction: ''}
# - target: {name: invented, mass: 5.0e+6, distance: 9.0}
"""
ROWS = """time what value error
0.0 flux 1.0 0.1
10.0 q 0.1 0.02
20.0 u 0.2 0.02
30.0 east 10.0 30.0
"""
PLAIN = "time,what,value,error\n0,flux,1,0.1\n10,q,0.1,0.02\n20,u,0.2,0.02\n"


def read(tmp_path: Path, text: str | bytes, name: str = "f.ecsv", columns: str | None = None) -> Flare:
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    if columns is None:
        return read_flare(path)
    (tmp_path / "map.toml").write_text(columns)
    return read_flare(path, tmp_path / "map.toml")


def test_the_table_that_is_spoilt_below_is_good(tmp_path: Path) -> None:
    assert len(read(tmp_path, HEAD + ROWS)) == 4
    assert len(read(tmp_path, PLAIN, "f.csv", '[units]\ntime = "min"\nflux = "mJy"\n')) == 3


SPOILT_ROWS = [
    ("0.1 0.02", "0.1 0.0", r"row 2: error of q is 0; give a positive 1-sigma error"),
    ("0.1 0.02", "0.1 -0.02", r"row 2: error of q is -0.02; give a positive"),
    ("0.2 0.02", "nan 0.02", r"row 3: value of u is empty or NaN; give a number or remove the row"),
    ("0.2 0.02", "0.2 nan", r"row 3: error of u is empty or NaN"),
    ("0.2 0.02", '"" 0.02', r"row 3: value of u is empty or NaN"),
    ("0.2 0.02", "inf 0.02", r"row 3: value of u is infinite"),
    ("0.2 0.02", "0.2 inf", r"row 3: error of u is infinite"),
    ("0.2 0.02", "abc 0.02", r"row 3: value is 'abc'; give a number"),
    ("20.0 u", "nan u", r"row 3: time is empty or NaN; fill it in or remove the row"),
    ("20.0 u", '"" u', r"row 3: time is empty or NaN"),
    ("20.0 u", "20.0 colour", r"row 3: unknown what 'colour'; one of flux, q, u, Q, U, east"),
    ("20.0 u", '20.0 ""', r"row 3: "),
    ("20.0 u 0.2 0.02\n", "10.0 q 0.1 0.02\n", r"row 3: repeats row 2; remove one of them"),
    ("0.2 0.02", "20.0 2.0", r"row 3: u is 20, more than all the light; .*units: \{u: percent\}"),
    ("30.0 east", "3e6 east", r"rows span 2.08e\+03 d, out of proportion for target 'invented'.*check"),
    ("30.0 east 10.0 30.0\n", "", None),
    ("20.0 u 0.2 0.02\n30.0 east 10.0 30.0\n", "", r"2 rows; a flare needs at least 3"),
    ("30.0 east 10.0 30.0\n", "30.0 east 10.0\n", r"cannot be read as a table"),
]  # fmt: skip
SPOILT_HEADS = [
    ("flux: mJy, ", "", r"flux has no unit; give it in the metadata, as units: \{flux: mJy\}"),
    ("east: uas", "east: mJy", r"unit 'mJy' of east does not fit; give one that converts to uas"),
    ("flux: mJy", "flux: gronk", r"unit 'gronk' of flux is unknown to astropy"),
    ("flux: mJy", "flux: mag", r"unit 'mag' of flux is no linear flux"),
    ("flux: mJy", "flux: mag(AB)", r"unit 'mag\(AB\)' of flux is no linear flux"),
    ("flux: mJy", "fluxes: mJy", r"units: unknown key 'fluxes'"),
    ("unit: min, ", "", r"column time has no unit; give one in the header.*or state time_format"),
    ("unit: min", "unit: mJy", r"unit 'mJy' of time is no time"),
    ("mass: 5.0e+6, ", "", r"target: key 'mass' is missing"),
    ("mass: 5.0e+6", "mass: -1", r"mass is -1.0; give a positive number"),
    ("mass: 5.0e+6", "mass: heavy", r"mass is 'heavy'; give a finite number"),
    ("# meta: !!omap\n", "# meta: !!omap\n# - t_ref: 4000\n", r"t_ref is .* from rows that span 30 min"),
    ("# meta: !!omap\n", "# meta: !!omap\n# - t_ref: noon\n", r"t_ref is 'noon'; give a number in the unit"),
    ("# meta: !!omap\n", "# meta: !!omap\n# - time_format: sundial\n", r"time_format 'sundial' is unknown"),
    ("omap\n", "omap\n# - {time_format: mjd}\n# - {time_scale: lunar}\n", r"time_scale 'lunar' is unknown"),
    ("{flux: mJy", "{{flux: mJy", r"cannot be read as a table"),
    ("# datatype:\n", "# types:\n", r"cannot be read as a table: its header lacks 'datatype'"),
    ("name: error", "name: value", r"cannot be read as a table"),
]  # fmt: skip


@pytest.mark.parametrize(("good", "bad", "reason"), SPOILT_ROWS)
def test_spoilt_rows(tmp_path: Path, good: str, bad: str, reason: str | None) -> None:
    assert good in ROWS
    if reason is None:
        assert len(read(tmp_path, HEAD + ROWS.replace(good, bad))) == 3
        return
    with pytest.raises(UserError, match=reason) as refusal:
        read(tmp_path, HEAD + ROWS.replace(good, bad))
    assert str(refusal.value).startswith(str(tmp_path / "f.ecsv"))
    assert "\n" not in str(refusal.value)


@pytest.mark.parametrize(("good", "bad", "reason"), SPOILT_HEADS)
def test_spoilt_metadata(tmp_path: Path, good: str, bad: str, reason: str) -> None:
    assert good in HEAD
    with pytest.raises(UserError, match=reason) as refusal:
        read(tmp_path, HEAD.replace(good, bad) + ROWS)
    assert str(refusal.value).startswith(str(tmp_path / "f.ecsv"))


MINUTES = '[units]\ntime = "min"\nflux = "mJy"\n'


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("", "is empty; give an ECSV or CSV table"),
        ("\n \n", "is empty"),
        ("time,what,value,error\n", "holds no rows"),
        (b"\x80\x81\xff\x00garbage", "is not a text file"),
        (b"\x89PNG\r\n\0\0\0", "is not a text file"),
        ("words that are\nno table\nat all\n", "has no column"),
        ("<html>\n<body>\n</html>\n", "has no column"),
        (PLAIN.replace("value,error", "value,value"), "column 'value' stands twice; remove or rename one"),
        (PLAIN.replace("value,error", "value,"), "a column has no header"),
        (PLAIN.replace("what", "which"), "has no column 'what' but time, which, value, error; rename"),
        (PLAIN.replace("q,0.1,0.02", "q,0.1"), "row 2: 3 cells under 4 headers; correct the row"),
        (PLAIN.replace("q,0.1", "q,x"), "row 2: value is 'x'; give a number"),
        (PLAIN.replace("q,0.1", "q,"), "row 2: value of q is empty or NaN"),
        (PLAIN.replace("10,q", "10,"), "row 2: what is empty; fill it in or remove the row"),
        (PLAIN.replace("10,q", ",q"), "row 2: time is empty or NaN"),
        (PLAIN.replace("10,q", "ten,q"), "row 2: time is 'ten'; give a number, or state time_format"),
    ],
)
def test_files_that_are_no_tables(tmp_path: Path, text: str | bytes, reason: str) -> None:
    with pytest.raises(UserError, match=reason) as refusal:
        read(tmp_path, text, "f.csv", MINUTES)
    assert str(refusal.value).startswith(str(tmp_path / "f.csv"))


def test_files_that_cannot_be_opened(tmp_path: Path) -> None:
    with pytest.raises(UserError, match="cannot be read: No such file"):
        read_flare(tmp_path / "nothing.ecsv")
    with pytest.raises(UserError, match="cannot be read: Is a directory"):
        read_flare(tmp_path)


@pytest.mark.parametrize(
    ("columns", "reason"),
    [
        ("[columns\n", "cannot be read as a column map in TOML"),
        ("[colums]\n", "unknown key 'colums'"),
        ('[columns]\nthing = "x"\n', "unknown key 'thing'"),
        ("[columns]\ntime = 3\n", "give a table of texts"),
        ('[measured.flux]\nvalue = "F"\n', "key 'error' is missing"),
        ('[measured.colour]\nvalue = "F"\nerror = "G"\n', "unknown key 'colour'"),
        ('[columns]\nwhat = "w"\n[measured.flux]\nvalue = "F"\nerror = "G"\n', "give one or the other"),
        ("units = 3\n", "units is 3; give a table of texts"),
    ],
)
def test_column_maps(tmp_path: Path, columns: str, reason: str) -> None:
    with pytest.raises(UserError, match=reason):
        read(tmp_path, PLAIN, "f.csv", columns)


def test_a_bad_date_names_its_row(tmp_path: Path) -> None:
    dates = ("2031-01-01T00:00:00", "2031-13-01T00:00:00", "2031-01-01T00:20:00")
    text = "time,what,value,error\n" + "".join(f"{date},q,.1,.1\n" for date in dates)
    with pytest.raises(UserError, match="row 2: time is '2031-13-01T00:00:00', which is not an ISO date"):
        read(tmp_path, text, "f.csv")


def test_a_date_beyond_all_calendars_names_its_row(tmp_path: Path) -> None:
    text = "time,what,value,error\n60000,q,.1,.1\n6e25,q,.1,.1\n60001,q,.1,.1\n"
    with pytest.raises(UserError, match=r"row 2: time is no date .* check time_format"):
        read(tmp_path, text, "f.csv", 'time_format = "mjd"\n')
    with pytest.raises(UserError, match=r"t_ref is '6e\+25', which is not mjd from the years"):
        read(tmp_path, text.replace("6e25", "60000.5"), "f.csv", 'time_format = "mjd"\nt_ref = 6e25\n')


def test_a_span_out_of_proportion_for_the_target_of_a_campaign(tmp_path: Path) -> None:
    text = "time,what,value,error\n0,q,.1,.1\n1,q,.1,.2\n25,q,.1,.3\n"
    flare = read(tmp_path, text, "f.csv", '[units]\ntime = "d"\n')
    assert flare.rows(Target("heavy", 1e9, 1e5)).time.size == 3
    with pytest.raises(UserError, match=r"f.csv: rows span 25 d, out of proportion for target 'light'"):
        flare.rows(Target("light", 5e6, 9.0))
    with pytest.raises(UserError, match="out of proportion for any target"):
        read(tmp_path, text.replace("25,", "1e6,"), "f.csv", '[units]\ntime = "d"\n')
    at_once = text.replace("\n1,", "\n0,").replace("\n25,", "\n0,")
    with pytest.raises(UserError, match="rows span 0 s, out of proportion"):
        read(tmp_path, at_once, "f.csv", '[units]\ntime = "d"\n')


def test_flux_that_does_not_convert_to_the_campaign(tmp_path: Path) -> None:
    flare = read(tmp_path, HEAD.replace("mJy", "adu") + ROWS)
    with pytest.raises(UserError, match="flux unit 'adu' does not convert to the campaign's 'mJy'"):
        flare.rows(Target("x", 5e6, 9.0), "mJy")


def test_gathering_reports_and_goes_on(tmp_path: Path) -> None:
    folder = tmp_path / "season"
    folder.mkdir()
    (folder / "a.ecsv").write_text(HEAD + ROWS)
    (folder / "b.ecsv").write_text(HEAD + ROWS.replace("0.1 0.02", "0.1 0"))
    (folder / "c.csv").write_text("nonsense")
    (folder / "notes.txt").write_text("not a table, and not read")
    again = tmp_path / "again.ecsv"
    again.write_text((HEAD + ROWS).replace("# meta: !!omap\n", "# meta: !!omap\n# - flare: a\n"))
    found = gather([folder, again, again])
    assert [flare.name for flare in found.flares] == ["a"]
    assert [refusal.split(":")[0].split(",")[0] for refusal in found.refusals] == [
        str(folder / "b.ecsv"), str(folder / "c.csv"), str(again),
    ]  # fmt: skip
    assert "stands in" in found.refusals[2]


def test_a_bad_row_refuses_its_flare_and_not_its_table(tmp_path: Path) -> None:
    table = "time,what,value,error,flare\n" + "".join(
        f"{minute},flux,1,{error},{flare}\n"
        for flare, error in (("good", 0.1), ("bad", 0.0))
        for minute in (0, 5, 10)
    )
    (tmp_path / "f.csv").write_text(table)
    (tmp_path / "map.toml").write_text(MINUTES)
    found = gather([tmp_path / "f.csv"], tmp_path / "map.toml")
    assert [flare.name for flare in found.flares] == ["good"]
    assert found.refusals == (
        f"{tmp_path / 'f.csv'}, flare bad, row 4: error of flux is 0; give a positive 1-sigma error",
    )
    (tmp_path / "none").mkdir()
    with pytest.raises(UserError, match=r"holds no \.ecsv or \.csv files"):
        gather([tmp_path / "none"])
    with pytest.raises(UserError, match="no flares: give files or folders"):
        gather([])
