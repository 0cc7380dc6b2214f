"""Families from TOML: what is read, what is refused and how the refusal reads."""

import pytest

from emu.errors import UserError
from emu.families.catalogue import family, family_text, parse_family

TEXT = family_text(family("midplane-frozen"))
BUMP = """
peak_time_2 = { uniform = [-30.0, 30.0] }
rise_time_2 = { log_uniform = [5.0, 80.0] }
decay_time_2 = { log_uniform = [5.0, 80.0] }
weight_2 = { uniform = [0.05, 1.0] }
"""


def test_a_second_bump_a_spot_and_an_image_join_by_their_keys():
    text = TEXT.replace("bumps = 1", "bumps = 2").replace("spot = false", "spot = true")
    text = text.replace("orders = 1", "orders = 2") + BUMP + "spot_size = { log_uniform = [0.2, 2.0] }\n"
    found = parse_family(text, "mine.toml")
    assert (found.bumps, found.spot, found.orders) == (2, True, 2)
    assert {"weight_2", "spot_size"} <= {parameter.name for parameter in found.parameters}
    assert found.source.bumps == 2
    assert parse_family(family_text(found), "again") == found


def test_optional_keys_may_be_left_out():
    lines = [line for line in TEXT.splitlines() if not line.startswith(("bumps", "spot", "orders"))]
    assert parse_family("\n".join(lines), "mine.toml") == family("midplane-frozen")


def test_a_path_to_a_file_works_and_a_name_may_differ(tmp_path):
    file = tmp_path / "mine.toml"
    file.write_text(TEXT.replace('name = "midplane-frozen"', 'name = "my own"'))
    assert family(str(file)).name == "my own"


def test_part_of_a_circle_is_no_circle():
    whole = {p.name: p.circular for p in family("midplane-turning").parameters}
    assert [name for name, circular in whole.items() if circular] == ["axis_angle", "phase", "roll"]
    half = parse_family(TEXT.replace("phase = { uniform = [0.0, 360.0]", "phase = { uniform = [0.0, 180.0]"), "x")
    assert not {p.name: p.circular for p in half.parameters}["phase"]


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("r_min = 3.0", 'r_min = "3"', "r_min is '3'; give a finite number"),
        ("r_min = 3.0", "", "key 'r_min' is missing"),
        ("r_min = 3.0", "r_min = 3.0\ncolour = 1", "unknown key 'colour'"),
        ("r_min = 3.0", "r_min = 0.5", "r_min is 0.5; give"),
        ('path = "midplane"', 'path = "spiral"', "path is 'spiral'; one of 'midplane', 'helix', 'drift'"),
        ('path = "midplane"', 'path = "helix"', "key 'opening' is missing"),
        ('inner = "frozen"', "inner = 3", "inner is 3; one of"),
        ("bumps = 1", "bumps = 3", "bumps is 3; one of 1, 2"),
        ("bumps = 1", "bumps = true", "bumps is True; one of 1, 2"),
        ("bumps = 1", "bumps = 2", "key 'peak_time_2' is missing"),
        ("spot = false", "spot = 0", "spot is 0; one of False, True"),
        ("spot = false", "spot = true", "key 'spot_size' is missing"),
        ("valid = [-160.0, 160.0]", "valid = [10.0, 20.0]", "give an interval that holds time 0"),
        ("valid = [-160.0, 160.0]", "valid = 5", "valid is 5; give two numbers"),
        ("spin = { uniform = [-0.95, 0.95] }", "", "key 'spin' is missing"),
        ("spin = { uniform", "spin = { flat", "spin: unknown key 'flat'"),
        ("spin = { uniform = [-0.95, 0.95] }", "spin = 0.5", "spin: write { density = [first, second] }"),
        ("[-0.95, 0.95]", "[-1.0, 0.95]", "spin reaches from -1 to 0.95; stay within -0.998 to 0.998"),
        ("[-0.95, 0.95]", "[0.95, -0.95]", "spin: prior uniform"),
        ("[-0.95, 0.95]", "[0.1]", "uniform is [0.1]; give two numbers"),
        ("uniform = [5.0, 15.0]", "normal = [8.0, 1.0]", "radius reaches from -inf"),
        ('name = "midplane-frozen"', 'name = ""', "name is ''"),
        ("[parameters]", "[parameters", "not valid TOML"),
    ],
)
def test_a_mistake_is_one_line_that_names_file_and_cure(old, new, message):
    assert old in TEXT
    with pytest.raises(UserError) as caught:
        parse_family(TEXT.replace(old, new), "mine.toml")
    assert str(caught.value).startswith("mine.toml")
    assert message in str(caught.value)
    assert "\n" not in str(caught.value)


def test_an_unknown_family_lists_the_known():
    with pytest.raises(UserError, match="midplane-frozen"):
        family("no-such")
