"""The public curves: symmetries, limits, facts of the trade, refusals."""

from __future__ import annotations

import numpy as np
import pytest

import emu
from emu.errors import UserError

ORBIT = {
    "spin": 0.6, "inclination": 50.0, "axis_angle": 25.0, "radius": 7.0, "phase": 40.0, "rate": 0.9, "tilt": 35.0,
    "pitch": 20.0, "index": 0.6, "polarised_share": 0.7, "brightness": 1.4, "peak_time": 4.0, "rise_time": 25.0,
    "decay_time": 40.0,
}  # fmt: skip
HELIX = {**ORBIT, "opening": 0.02, "rise": 0.08, "height": 1.5}
TIMES = np.linspace(-60.0, 60.0, 31)
POLARISED = ("q", "u")


def _steady(**given):
    return {**ORBIT, "spin": 0.0, "rate": 1.0, "radius": 8.0, "phase": 0.0, "axis_angle": 0.0, "polarised_share": 1.0,
            "peak_time": 0.0, "rise_time": 1e9, "decay_time": 1e9, **given}  # fmt: skip


def _period(n=721):
    return np.linspace(0.0, 2.0 * np.pi * 8.0**1.5, n)


def _loops(curves):
    angle = np.unwrap(np.arctan2(curves["u"], curves["q"]))
    return (angle[-1] - angle[0]) / (2.0 * np.pi)


def test_shapes_and_counts():
    """Every curve has the shape of the times; the counts are integers."""
    curves = emu.curves("midplane-frozen", ORBIT, TIMES)
    for name in ("flux", "q", "u", "east", "north", "emission_time", "redshift", "magnification"):
        assert curves[name].shape == TIMES.shape
    assert curves["failures"] == 0


def test_reference_time_needs_no_constant():
    """The light at t_ref left at t0: emission time 0 at arrival time 0."""
    curves = emu.curves("helix-frozen", HELIX, [0.0])
    assert curves["emission_time"][0] == pytest.approx(0.0, abs=2e-5)


@pytest.mark.parametrize("orders", [1, 2])
def test_reflection_in_the_midplane(orders):
    """i -> 180 - i with z -> -z: the picture is mirrored up-down, so u (axis at 0) and the north offset change sign.

    A mirror reverses an axial field's poloidal part: (tilt, pitch) -> (180 - tilt, pitch) with b ~ -b.
    """
    here = {**HELIX, "axis_angle": 0.0}
    there = {**here, "inclination": 130.0, "rise": -0.08, "height": -1.5, "tilt": 180.0 - 35.0, "pitch": 20.0}
    a, b = (emu.curves("helix-frozen", p, TIMES, orders=orders) for p in (here, there))
    sign = {"u": -1.0, "north": -1.0}
    for name in ("flux", "q", "u", "east", "north", "emission_time", "redshift"):
        assert b[name] == pytest.approx(sign.get(name, 1.0) * a[name], abs=3e-5), name


def test_reversal_of_spin_and_motion():
    """a -> -a with the motion mirrored in azimuth is the mirror image left-right. With rate = 0 the motion is its own
    mirror image up to the azimuth: a drift at phase and one at -phase."""
    drift = {name: value for name, value in HELIX.items() if name != "rate"}
    here = {**drift, "axis_angle": 0.0}
    there = {**here, "spin": -0.6, "phase": -40.0, "pitch": -20.0}
    a, b = (emu.curves("drift-frozen", p, TIMES) for p in (here, there))
    sign = {"u": -1.0, "east": -1.0}
    for name in ("flux", "q", "u", "east", "north"):
        assert b[name] == pytest.approx(sign.get(name, 1.0) * a[name], abs=3e-5), name


def test_axis_angle_rotates_the_sky():
    """Omega turns (q, u) by twice and (east, north) by once the angle, north through east."""
    a, b = (emu.curves("helix-frozen", {**HELIX, "axis_angle": w}, TIMES) for w in (0.0, 70.0))
    w = np.radians(70.0)
    assert b["q"] + 1j * b["u"] == pytest.approx((a["q"] + 1j * a["u"]) * np.exp(2j * w), abs=1e-12)
    assert b["north"] + 1j * b["east"] == pytest.approx((a["north"] + 1j * a["east"]) * np.exp(1j * w), abs=1e-12)
    assert b["flux"] == pytest.approx(a["flux"], rel=1e-12)


def test_scaling():
    """Brightness scales the flux alone, the polarised share q and u alone."""
    a = emu.curves("midplane-frozen", ORBIT, TIMES)
    b = emu.curves("midplane-frozen", {**ORBIT, "brightness": 2.8, "polarised_share": 0.35}, TIMES)
    assert b["flux"] == pytest.approx(2.0 * a["flux"])
    for name in POLARISED:
        assert b[name] == pytest.approx(0.5 * a[name])


def test_far_emitters_feel_no_bending():
    """At r = 1000 a still emitter before the hole has mu, g -> 1 up to order 2/r and no displacement (flat space)."""
    still = {**{k: v for k, v in HELIX.items() if k != "rate"}, "radius": 1000.0, "opening": 0.0, "rise": 0.0,
             "height": 0.0, "phase": 0.0, "inclination": 90.0, "spin": 0.0}  # fmt: skip
    curves = emu.curves("drift-frozen", still, [0.0])
    assert curves["redshift"][0] == pytest.approx(np.sqrt(1 - 2 / 1000), rel=1e-5)
    assert curves["magnification"][0] == pytest.approx(1.0, abs=3e-3)
    assert np.hypot(curves["east"], curves["north"])[0] == pytest.approx(0.0, abs=1e-6)


@pytest.mark.parametrize(("spin", "redshift"), [(0.0, 0.707106781), (0.9, 0.743444059)])
def test_face_on_redshift(spin, redshift):
    """Circular orbit at r = 6 seen face on (Luminet 1979; Bardeen, Press & Teukolsky 1972)."""
    orbit = {**ORBIT, "spin": spin, "inclination": 0.0, "radius": 6.0, "rate": 1.0}
    curves = emu.curves("midplane-frozen", orbit, TIMES)
    assert curves["redshift"] == pytest.approx(np.full(31, redshift), abs=2e-9)


def test_edge_on_redshift_extremes():
    """Tangential photons at r = 6 without spin: sqrt 2 and sqrt(2)/3 (Luminet 1979)."""
    period = np.linspace(0, 2 * np.pi * 6**1.5, 4001)
    curves = emu.curves("midplane-frozen", _steady(inclination=90.0, radius=6.0), period)
    assert curves["redshift"].max() == pytest.approx(np.sqrt(2.0), abs=1e-4)
    assert curves["redshift"].min() == pytest.approx(np.sqrt(2.0) / 3.0, abs=1e-4)


@pytest.mark.parametrize(
    ("pitch", "inclination", "loops"),
    [(90.0, 20.0, 2), (90.0, 45.0, 2), (90.0, 75.0, 2), (0.0, 20.0, 2), (0.0, 45.0, 0), (90.0, 160.0, -2)],
)
def test_loops_of_an_orbit(pitch, inclination, loops):
    """Loops of (Q, U) about the origin at r = 8 without spin (common practice; independent integration)."""
    curves = emu.curves("midplane-frozen", _steady(pitch=pitch, tilt=0.0, inclination=inclination), _period())
    assert _loops(curves) == pytest.approx(loops, abs=0.01)


def test_vertical_field_edge_on_is_horizontal():
    """At i = 85, r = 8 a vertical field keeps its EVPA between 88 and 120 degrees (independent integration)."""
    curves = emu.curves("midplane-frozen", _steady(pitch=0.0, tilt=0.0, inclination=85.0), _period())
    evpa = np.degrees(0.5 * np.arctan2(curves["u"], curves["q"])) % 180.0
    assert evpa.min() == pytest.approx(88.0, abs=1.0)
    assert evpa.max() == pytest.approx(120.0, abs=1.0)


def test_radial_is_toroidal_turned():
    """A radial field gives the toroidal pattern turned by 96 degrees on average, 90 to 106, at i = 20, r = 8."""
    toroidal, radial = (
        emu.curves("midplane-frozen", _steady(pitch=p, tilt=w, inclination=20.0), _period())
        for p, w in ((90.0, 0.0), (0.0, 90.0))
    )
    gap = 0.5 * (np.arctan2(radial["u"], radial["q"]) - np.arctan2(toroidal["u"], toroidal["q"]))
    gap = np.degrees(gap) % 180.0
    assert gap.mean() == pytest.approx(96.0, abs=1.0)
    assert (gap.min(), gap.max()) == pytest.approx((90.0, 106.0), abs=1.0)


def test_a_small_spot_is_a_point():
    """A spot tends to the point as its size squared."""
    point = emu.curves("midplane-turning", {**ORBIT, **TURN}, TIMES)
    gaps = []
    for size in (0.04, 0.02, 0.01):
        spot = emu.curves("midplane-turning", {**ORBIT, **TURN, "spot_size": size}, TIMES, spot_points=27)
        gaps.append(np.abs(spot["q"] - point["q"]).max())
    assert gaps[0] / gaps[1] == pytest.approx(4.0, rel=0.1)
    assert gaps[1] / gaps[2] == pytest.approx(4.0, rel=0.1)
    assert gaps[2] < 1e-4


def test_more_points_of_a_spot_converge():
    """125 and 343 points of a spot of size 0.5 agree to 1e-3."""
    few, many = (
        emu.curves("midplane-frozen", {**ORBIT, "spot_size": 0.5}, TIMES[::6], spot_points=n) for n in (125, 343)
    )
    for name in POLARISED:
        assert few[name] == pytest.approx(many[name], abs=1e-3)
    assert few["flux"] == pytest.approx(many["flux"], rel=2e-3)


TURN = {"turn": 90.0, "roll": 30.0, "turn_time": 0.0, "turn_duration": 10.0, "dip": 0.3}
SECOND = {"peak_time_2": 30.0, "rise_time_2": 8.0, "decay_time_2": 9.0, "weight_2": 0.5}


def test_turn_of_nothing_is_frozen():
    """With turn = 0 and dip = 0 the turning family is the frozen one."""
    a = emu.curves("midplane-frozen", ORBIT, TIMES)
    b = emu.curves("midplane-turning", {**ORBIT, **TURN, "turn": 0.0, "dip": 0.0}, TIMES)
    for name in ("flux", "q", "u"):
        assert b[name] == pytest.approx(a[name], abs=1e-12)


def test_roll_reverses_with_the_axis():
    """b and -b are one axis, together with roll -> -roll."""
    a = emu.curves("midplane-turning", {**ORBIT, **TURN}, TIMES)
    other = {"tilt": ORBIT["tilt"] + 180.0, "pitch": -ORBIT["pitch"], "roll": -TURN["roll"]}
    b = emu.curves("midplane-turning", {**ORBIT, **TURN, **other}, TIMES)
    for name in ("flux", "q", "u"):
        assert b[name] == pytest.approx(a[name], abs=1e-10)


def test_second_bump_adds():
    """E is the sum of the bumps."""
    one = emu.curves("midplane-frozen", ORBIT, TIMES)
    only = emu.curves(
        "midplane-frozen", {**ORBIT, "peak_time": 30.0, "rise_time": 8.0, "decay_time": 9.0, "brightness": 0.7}, TIMES
    )
    both = emu.curves("midplane-frozen", {**ORBIT, **SECOND}, TIMES)
    assert both["flux"] == pytest.approx(one["flux"] + only["flux"], rel=1e-9)


def test_second_image_adds_as_stokes():
    """With both images the flux grows, and fractions stay below Pi_0 times the share."""
    one, two = (emu.curves("midplane-frozen", ORBIT, TIMES, orders=n) for n in (1, 2))
    assert np.all(two["flux"] > one["flux"])
    assert np.all(np.hypot(two["q"], two["u"]) < 0.75 * 0.7)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"jitter_q_u": 0.01}, "unknown parameter jitter_q_u"),
        ({"spin": 0.9995}, "spin must be"),
        ({"radius": np.nan}, "radius must be a finite number"),
        ({"rise_time": 0.0}, "rise_time must be above 0"),
        ({"radius": 1.5}, "not possible"),
        ({"rate": 20.0}, "not possible"),
    ],
)
def test_refusals(change, words):
    """What cannot be is refused with one line that names it."""
    with pytest.raises(UserError, match=words) as caught:
        emu.curves("midplane-frozen", {**ORBIT, **change}, TIMES)
    assert "\n" not in str(caught.value)


def test_missing_is_refused():
    """A parameter that is left out is named."""
    with pytest.raises(UserError, match="missing parameter tilt"):
        emu.curves("midplane-frozen", {k: v for k, v in ORBIT.items() if k != "tilt"}, TIMES)
