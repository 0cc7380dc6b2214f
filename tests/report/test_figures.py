"""Figures say what they should, with units, without text on text, and the same bytes each time."""

import itertools
from pathlib import Path

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.text import Text

from emu.families.parameters import Parameter
from emu.families.priors import Uniform
from emu.observe.rows import KINDS, Rows
from emu.report.corner import corner_figure
from emu.report.figures import data_figure, plane_figure, planes
from emu.report.intervals import interval
from emu.report.predictive import Prediction
from emu.report.style import Scale, save
from emu.units import Target

SCALE = Scale(Target("invented", 5.0e6, 9.0), "mJy")
TIMES = np.linspace(-60.0, 60.0, 50)


def measured(*kinds: str, apart: bool = True) -> Rows:
    """Make 12 rows a kind, of different kinds at different times if they are apart."""
    rng = np.random.default_rng(4)
    time = np.linspace(-55.0, 55.0, 12)
    times = [time + (1.5 * number if apart else 0.0) for number in range(len(kinds))]
    code = np.repeat([KINDS.index(kind) for kind in kinds], 12).astype(np.int8)
    return Rows(np.concatenate(times), code, rng.normal(0.0, 0.2, 12 * len(kinds)), np.full(12 * len(kinds), 0.05))


def predicted(*kinds: str) -> Prediction:
    rng = np.random.default_rng(5)
    phase = TIMES / 20.0 + rng.normal(0.0, 0.1, (30, 1))
    curves = {kind: 0.2 * np.cos(phase - number) for number, kind in enumerate(kinds)}
    return Prediction(TIMES, curves, {kind: np.full_like(c, 0.05) for kind, c in curves.items()}, 0)


def corner(count: int):
    rng = np.random.default_rng(6)
    parameters = [
        Parameter(f"p{k}", f"x_{k}", ("deg", "GM/c3")[k % 2], Uniform(0.0, 360.0), circular=k % 4 == 0)
        for k in range(count)
    ]
    prior = rng.uniform(0.0, 360.0, (4000, count))
    draws = rng.normal(0.0, 9.0, (1000, count)) % 360.0
    found = [interval(draws[:, k], prior[:, k], parameter) for k, parameter in enumerate(parameters)]
    return corner_figure(draws, prior, parameters, found, "a flare, a family")


FIGURES = {
    "data": lambda: data_figure(
        measured("flux", "q", "u", "east", "north"),
        predicted("flux", "q", "u", "east", "north"),
        SCALE,
        "a flare, a family",
    ),
    "loop": lambda: plane_figure(("q", "u"), measured("q", "u"), predicted("q", "u"), SCALE, "a flare, a family"),
    "stokes": lambda: plane_figure(("Q", "U"), measured("Q", "U"), predicted("Q", "U"), SCALE, "a flare"),
    "sky": lambda: plane_figure(
        ("east", "north"),
        measured("east", "north", apart=False),
        predicted("east", "north"),
        SCALE,
        "a flare, a family",
    ),
    "corner": lambda: corner(5),
    "corner-large": lambda: corner(15),
}


def texts(figure) -> list[Text]:
    """List the texts that are drawn; ticks beyond the ends of an axis exist but are not."""
    FigureCanvasAgg(figure).draw()
    beyond = set()
    for axes in figure.axes:
        for axis in (axes.xaxis, axes.yaxis):
            low, high = sorted(axis.get_view_interval())
            for tick in axis.get_major_ticks():
                if not low <= tick.get_loc() <= high:
                    beyond |= {tick.label1, tick.label2}
    return [
        text
        for text in figure.findobj(Text)
        if text.get_text().strip()
        and text.get_visible()
        and (text.axes is None or text.axes.get_visible())
        and text not in beyond
    ]


@pytest.mark.parametrize("name", FIGURES)
def test_no_text_lies_on_another_or_leaves_the_page(name: str) -> None:
    figure = FIGURES[name]()
    page = figure.bbox
    boxes = [(text.get_text(), text.get_window_extent()) for text in texts(figure)]
    shown = [(text, box) for text, box in boxes if box.width > 1 and page.overlaps(box)]
    assert len(shown) > 5
    for text, box in shown:
        assert page.x0 - 1 <= box.x0 <= box.x1 <= page.x1 + 1, text
        assert page.y0 - 1 <= box.y0 <= box.y1 <= page.y1 + 1, text
    for (one, first), (two, second) in itertools.combinations(shown, 2):
        width = min(first.x1, second.x1) - max(first.x0, second.x0)
        height = min(first.y1, second.y1) - max(first.y0, second.y0)
        assert width <= 1 or height <= 1, f"{one!r} on {two!r}"


def test_axes_bear_units() -> None:
    said = " | ".join(text.get_text() for name in ("data", "loop", "stokes", "sky") for text in texts(FIGURES[name]()))
    for label in (
        "flux (mJy)",
        "q = Q/I",
        "u = U/I",
        "Q (mJy)",
        "U (mJy)",
        "east (µas)",
        "north (µas)",
        "minutes from t_ref",
    ):
        assert label in said
    said = " | ".join(text.get_text() for text in texts(FIGURES["corner"]()))
    assert "$x_0$ (°)" in said
    assert "$x_1$ (GM/c³)" in said


def test_east_is_to_the_left() -> None:
    axes = FIGURES["sky"]().axes[0]
    assert axes.get_xlim()[0] > axes.get_xlim()[1]


def test_measurements_stand_where_they_were_measured() -> None:
    rows = measured("flux", "east")
    figure = data_figure(rows, predicted("flux", "east"), SCALE, "a flare")
    line = figure.axes[1].containers[0].lines[0]
    here = rows.kind == KINDS.index("east")
    target = SCALE.target
    np.testing.assert_allclose(line.get_xdata(), rows.time[here] * target.time_unit / 60.0)
    np.testing.assert_allclose(line.get_ydata(), rows.value[here] * target.length_unit)


def marks(rows: Rows, pair: tuple[str, str]) -> dict:
    """Return the drawn points of a plane by label."""
    axes = plane_figure(pair, rows, predicted(*pair), SCALE, "a flare").axes[0]
    return {c.get_label(): np.asarray(c.get_offsets()) for c in axes.collections if c.get_label()[0] != "_"}


def test_pairs_measured_together_are_drawn_once() -> None:
    rows = measured("q", "u", apart=False)
    found = marks(rows, ("q", "u"))
    assert set(found) == {"measured together"}
    np.testing.assert_allclose(found["measured together"], rows.value.reshape(2, 12).T)


def test_measurements_in_turn_are_marked_as_interpolated() -> None:
    rows = measured("q", "u")
    found = marks(rows, ("q", "u"))
    assert set(found) == {"one interpolated"}
    # q is first and u last: the first q and the last u have no neighbour on both sides.
    assert len(found["one interpolated"]) == 22
    q, u = rows.value.reshape(2, 12)
    time, other = rows.time.reshape(2, 12)
    np.testing.assert_allclose(found["one interpolated"][0], (q[1], np.interp(time[1], other, u)))


def test_planes_need_both_kinds() -> None:
    assert planes(measured("flux", "q")) == ()
    assert planes(measured("q", "u", "east", "north")) == (("q", "u"), ("east", "north"))


def test_a_posterior_of_one_point_can_be_drawn() -> None:
    parameters = [Parameter(f"p{k}", f"x_{k}", "", Uniform(0.0, 1.0)) for k in range(2)]
    draws, prior = np.full((200, 2), 0.3), np.random.default_rng(0).random((500, 2))
    found = [interval(draws[:, k], prior[:, k], parameter) for k, parameter in enumerate(parameters)]
    assert texts(corner_figure(draws, prior, parameters, found, "a flare"))


def test_files_are_the_same_each_time(tmp_path: Path) -> None:
    for name in ("a", "b"):
        save(FIGURES["loop"](), tmp_path / name / "loop.png")
    assert (tmp_path / "a" / "loop.png").read_bytes() == (tmp_path / "b" / "loop.png").read_bytes()
