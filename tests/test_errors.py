"""UserError carries exactly one line."""

from emu.errors import UserError


def test_a_message_of_several_lines_becomes_one() -> None:
    assert str(UserError("flares.csv:\n  row 3\n  bad")) == "flares.csv: row 3 bad"


def test_it_is_a_value_error() -> None:
    assert issubclass(UserError, ValueError)
