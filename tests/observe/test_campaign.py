"""Campaigns: what they draw, what they call outside, and which TOML they refuse."""

import re
import time
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from emu.configs import config_names, config_text
from emu.errors import UserError
from emu.observe.campaign import Campaign, campaign, parse_campaign
from emu.observe.nuisance import Jitter
from emu.observe.rows import KINDS, RowBatch, Rows

REALISTIC = campaign("realistic")
MINUTE = 60.0 / REALISTIC.target.time_unit
CODE = {name: KINDS.index(name) for name in KINDS}
each_campaign = pytest.mark.parametrize("name", config_names("campaigns"))


def batch(seed: int = 1, n: int = 1024, of: Campaign = REALISTIC) -> RowBatch:
    return of.draw(n, np.random.default_rng(seed))


def without_gaps(name: str = "realistic") -> Campaign:
    text, where = config_text("campaigns", name)
    return parse_campaign(text.replace("count = [0, 2]", "count = [0, 0]"), where)


def times(rows: Rows, *kinds: str) -> np.ndarray:
    """Return the distinct times of kinds in minutes."""
    return np.unique(rows.time[np.isin(rows.kind, [CODE[kind] for kind in kinds])]) / MINUTE


def test_the_season_of_the_main_campaign() -> None:
    target = REALISTIC.target
    assert (target.mass, target.distance) == (5.0e6, 9.0)
    assert REALISTIC.window == (25.0, 90.0)
    assert REALISTIC.half_span == pytest.approx(45.0 * MINUTE)
    drawn = batch(of=without_gaps(), n=4000)
    flares = [drawn.rows(place) for place in range(4000)]
    spans = np.array([np.ptp(rows.time) / MINUTE for rows in flares])
    # A window is uniform in 25 to 90 minutes; the rows fill all but an interval of up to 3 at either end.
    assert 19.0 <= spans.min() < 27.0
    assert 87.0 < spans.max() <= 90.0
    assert spans.mean() == pytest.approx(57.5 - 2.0, abs=1.0)
    for kinds, low, high in ((("flux",), 1.0, 3.0), (("q", "u"), 3.0, 5.0), (("east", "north"), 3.0, 6.0)):
        steps = np.concatenate([np.diff(times(rows, *kinds)) for rows in flares])
        assert low - 1e-9 <= steps.min() < low + 0.1, kinds
        assert high - 0.1 < steps.max() <= high + 1e-9, kinds


def test_errors_of_the_main_campaign() -> None:
    drawn = batch(n=4000)
    micro = REALISTIC.target.length_unit
    for kinds, low, high, unit in (
        (("flux",), 0.02, 0.10, 1.0), (("q", "u"), 0.01, 0.05, 1.0), (("east", "north"), 20.0, 80.0, micro),
    ):  # fmt: skip
        errors = drawn.error[drawn.mask & np.isin(drawn.kind, [CODE[kind] for kind in kinds])] * unit
        assert low * (1 - 1e-9) <= errors.min() < 1.02 * low
        assert 0.98 * high < errors.max() <= high * (1 + 1e-9)


def test_q_and_u_are_measured_in_turn() -> None:
    drawn = batch(of=without_gaps())
    first = []
    for place in range(len(drawn)):
        rows = drawn.rows(place)
        kinds = rows.kind[np.isin(rows.kind, [CODE["q"], CODE["u"]])]
        assert np.all(np.diff(kinds) != 0)
        first.append(kinds[0] == CODE["q"])
    # Either may be the first: a fair coin, 1,024 times, to four standard deviations.
    assert np.mean(first) == pytest.approx(0.5, abs=4 * 0.5 / 32)


def test_positions_come_together_in_two_flares_of_three() -> None:
    drawn = batch(n=6000)
    east, north = ((drawn.kind == CODE[kind]) & drawn.mask for kind in ("east", "north"))
    has = east.any(axis=1)
    np.testing.assert_array_equal(has, north.any(axis=1))
    np.testing.assert_array_equal(drawn.time[east], drawn.time[north])
    assert has.mean() == pytest.approx(2 / 3, abs=4 * np.sqrt(2 / 9 / 6000))


def test_gaps_interrupt_everything() -> None:
    text, where = config_text("campaigns", "realistic")
    text = text.replace("count = [0, 2]", "count = [1, 1]").replace("[3.0, 8.0]", "[8.0, 8.0]")
    season = parse_campaign(text, where)
    drawn = season.draw(500, np.random.default_rng(3))
    longest = np.array([np.diff(np.unique(drawn.rows(place).time)).max() / MINUTE for place in range(500)])
    assert longest.min() >= 8.0
    assert longest.max() <= 8.0 + 2 * 3.0


@each_campaign
def test_shape_order_centre_and_padding(name: str) -> None:
    drawn = batch(of=campaign(name))
    assert drawn.time.shape == (1024, campaign(name).max_rows)
    assert np.all(drawn.mask[:, 1:] <= drawn.mask[:, :-1]), "real rows come first"
    assert drawn.mask.sum(axis=1).min() >= 3
    for place in range(200):
        rows = drawn.rows(place)
        assert np.all(np.diff(rows.time) >= 0.0)
        assert rows.time[0] == pytest.approx(-rows.time[-1], abs=1e-9)
    padded = ~drawn.mask
    for column, filler in (("time", 0.0), ("kind", 0), ("error", 1.0)):
        assert np.all(getattr(drawn, column)[padded] == filler)
    assert np.all(drawn.value == 0.0)
    assert np.abs(drawn.time).max() <= campaign(name).half_span


@each_campaign
def test_draws_follow_from_the_seed(name: str) -> None:
    one, same, other = (batch(seed, 16, campaign(name)) for seed in (1, 1, 2))
    np.testing.assert_array_equal(one.time, same.time)
    np.testing.assert_array_equal(one.error, same.error)
    assert not np.array_equal(one.time, other.time)


def test_a_thousand_schedules_in_a_tenth_of_a_second() -> None:
    rng = np.random.default_rng(1)
    seconds = []
    for _ in range(5):
        begin = time.perf_counter()
        REALISTIC.draw(1024, rng)
        seconds.append(time.perf_counter() - begin)
    assert min(seconds) < 0.1


@each_campaign
def test_what_a_campaign_draws_is_inside_it(name: str) -> None:
    drawn = batch(5, of=campaign(name))
    assert [reason for place in range(1024) for reason in campaign(name).outside(drawn.rows(place))] == []


def keep(rows: Rows, which: np.ndarray) -> Rows:
    return Rows(rows.time[which], rows.kind[which], rows.value[which], rows.error[which])


def rename(rows: Rows) -> Rows:
    return replace(rows, kind=np.where(rows.kind == CODE["q"], CODE["Q"], rows.kind).astype(np.int8))


def split(rows: Rows) -> Rows:
    return replace(rows, time=np.where(rows.kind == CODE["north"], rows.time + 0.01, rows.time))


def four_times_as_often(rows: Rows) -> Rows:
    flux = keep(rows, rows.kind == CODE["flux"])
    place = np.linspace(0.0, len(flux) - 1.0, 4 * len(flux) - 3)
    often = np.interp(place, np.arange(len(flux)), flux.time)
    one = np.ones(often.size)
    return Rows(often, np.zeros(often.size, dtype=np.int8), one, 0.05 * one)


SPAN = "its rows span .* minutes; the campaign's 19.0 to 90.0"
OUTSIDE: list[tuple[Callable[[Rows], Rows], str]] = [
    (lambda rows: replace(rows, time=rows.time * 3.0), SPAN),
    (lambda rows: replace(rows, time=rows.time * 0.2), SPAN),
    (lambda rows: replace(rows, time=rows.time + 10.0 * MINUTE), "t_ref is 10.0 minutes from the middle"),
    (lambda rows: replace(rows, error=rows.error * 20.0), "flux: errors .* the campaign's are 0.02 to 0.1"),
    (lambda rows: replace(rows, error=rows.error * 0.05), "q, u: errors .* the campaign's are 0.01 to 0.05"),
    (lambda rows: keep(rows, rows.kind != CODE["flux"]), "no flux rows; the campaign always measures them"),
    (lambda rows: keep(rows, rows.kind != CODE["north"]), "east, north: not at the same times"),
    (rename, "it has Q rows; the campaign measures east, flux, north, q, u"),
    (split, "east, north: not at the same times"),
    (lambda rows: keep(rows, np.abs(rows.time) > 15.0 * MINUTE), "flux: nothing for .* longest gap is 25.0"),
    (four_times_as_often, "flux: one exposure in 0.[0-9]* minutes; the campaign has at most one in 1.00"),
    (lambda rows: keep(rows, np.arange(len(rows)) < 2), "2 rows; at least 3 are needed"),
]


@pytest.mark.parametrize(("change", "reason"), OUTSIDE)
def test_what_lies_outside(change: Callable[[Rows], Rows], reason: str) -> None:
    drawn = batch(7)
    whole = next(
        rows
        for rows in (drawn.rows(place) for place in range(1024))
        if np.any(rows.kind == CODE["east"]) and np.ptp(rows.time) > 70.0 * MINUTE
    )
    assert REALISTIC.outside(whole) == ()
    reasons = REALISTIC.outside(change(whole))
    assert any(re.search(reason, text) for text in reasons), reasons


@pytest.mark.parametrize(
    ("good", "bad", "reason"),
    [
        ("window = [25.0, 90.0]", "", "key 'window' is missing"),
        ("window = [25.0, 90.0]", "windows = 3\nwindow = [25.0, 90.0]", "unknown key 'windows'"),
        ("window = [25.0, 90.0]", "window = [90.0, 25.0]", "put the lower end first"),
        ("window = [25.0, 90.0]", "window = 25.0", "give a range"),
        ("window = [25.0, 90.0]", 'window = ["25", 90.0]', "give a finite number"),
        ("window = [25.0, 90.0]", "window = [5.0, 90.0]", "window 5.0 minutes holds too few rows"),
        ("mass = 5.0e6", "mass = -5.0e6", "give a positive number"),
        ("mass = 5.0e6", "", "key 'mass' is missing"),
        ('flux_unit = "mJy"', "flux_unit = 3", "give a text"),
        ('kinds = ["flux"]', 'kinds = ["colour"]', "stream 1: unknown kind 'colour'"),
        ('kinds = ["flux"]', 'kinds = "flux"', "give a list of different kinds"),
        ('kinds = ["flux"]', 'kinds = ["q"]', "a kind stands in two streams"),
        ("alternate = true", 'alternate = "yes"', "alternate must be true or false"),
        ("cadence = [1.0, 3.0]", "cadence = [0.0, 3.0]", "cadence must be positive"),
        ("error = [0.01, 0.05]", "error = [0.0, 0.05]", "error must be positive"),
        ("share = 0.6666666666666666", "share = 1.5", "share must lie above 0"),
        ("unsteady = 0.1", "unsteady = 1.0", "unsteady must lie in 0 to 1"),
        ("unsteady = 0.1", "unsteady = 0.1\nspeed = 1", "stream 1: unknown key 'speed'"),
        ("count = [0, 2]", "count = [0, 1.5]", "give whole numbers"),
        ("length = [3.0, 8.0]", "length = [3.0, 20.0]", "a gap does not fit in the shortest window"),
        ("length = [3.0, 8.0]", "", r"\[gaps\]: key 'length' is missing"),
        ("[nuisance.jitter]", "[nuisance.wobble]", "unknown key 'wobble'"),
        ("range = [0.001, 0.05]", "range = [0.0, 0.05]", "needs 0 < low < high"),
        ("[gaps]", "[gaps", "not valid TOML"),
    ],
)
def test_refused_toml(good: str, bad: str, reason: str) -> None:
    text, _ = config_text("campaigns", "realistic")
    assert good in text
    with pytest.raises(UserError, match=reason) as refusal:
        parse_campaign(text.replace(good, bad, 1), "mine.toml")
    assert str(refusal.value).startswith("mine.toml")
    with pytest.raises(UserError, match="no campaign 'nothing'"):
        campaign("nothing")


@each_campaign
def test_the_text_gives_the_campaign_back(name: str) -> None:
    assert parse_campaign(campaign(name).text, "x") == campaign(name)


def test_jitter_is_added_to_q_and_u_alone() -> None:
    (jitter,) = REALISTIC.nuisances
    assert isinstance(jitter, Jitter)
    (parameter,) = jitter.parameters
    assert (parameter.name, parameter.unit, parameter.bounds) == ("jitter_q_u", "", (0.001, 0.05))
    # Log-uniform: the median is the geometric mean of the bounds.
    assert parameter.prior.ppf(np.array(0.5)) == pytest.approx(np.sqrt(0.001 * 0.05))
    kind = np.arange(len(KINDS), dtype=np.int8)[None, :]
    extra = jitter.variance(np.array([[0.01], [0.02]]), kind)
    expected = np.zeros((2, len(KINDS)))
    expected[:, CODE["q"]] = expected[:, CODE["u"]] = [1e-4, 4e-4]
    np.testing.assert_allclose(extra, expected)
