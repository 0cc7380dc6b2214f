"""Position angle and polarised fraction become q and u only where that is honest."""

from pathlib import Path

import numpy as np
import pytest
from scipy import integrate

from emu.errors import UserError
from emu.observe.flare import Flare, read_flare
from emu.observe.polarisation import MAX_ANGLE_ERROR, MIN_SIGNAL
from emu.observe.rows import KINDS

HEAD = "time,what,value,error\n0,flux,1,0.1\n"
COLUMNS = '[units]\ntime = "min"\nflux = "mJy"\nevpa = "deg"\n'


def read(tmp_path: Path, *rows: str) -> Flare:
    (tmp_path / "f.csv").write_text(HEAD + "".join(f"{row}\n" for row in rows))
    (tmp_path / "map.toml").write_text(COLUMNS)
    return read_flare(tmp_path / "f.csv", tmp_path / "map.toml")


def angle_error(signal: float) -> float:
    """Return the standard deviation in degrees of an EVPA at p0/σ = signal.

    The density of the angle is that of Wardle & Kronberg 1974, equation 5, integrated here by quadrature
    from the bivariate Gaussian of q and u itself.
    """

    def density(angle: float) -> float:
        along = signal * np.cos(2 * angle)
        across = signal * np.sin(2 * angle)
        weighed = integrate.quad(lambda p: p * np.exp(-0.5 * (p - along) ** 2), 0, signal + 12)[0]
        return 2.0 * weighed * np.exp(-0.5 * across**2) / (2.0 * np.pi)

    second = integrate.quad(lambda angle: angle**2 * density(angle), -np.pi / 2, np.pi / 2)[0]
    return float(np.degrees(np.sqrt(second)))


def test_the_bound_is_where_the_published_error_of_an_angle_is() -> None:
    # Table of Wardle & Kronberg 1974 / Simmons & Stewart 1985 as recomputed: 5.858 deg at S/N 5, 10.40 at 3.
    assert angle_error(3.0) == pytest.approx(10.40, abs=0.005)
    assert angle_error(MIN_SIGNAL) == pytest.approx(5.858, abs=0.0005)
    assert pytest.approx(angle_error(MIN_SIGNAL), abs=0.005) == MAX_ANGLE_ERROR


def test_gaussian_q_and_u_stand_in_for_angle_and_amount_at_the_bound() -> None:
    # At the bound itself: q = p cos 2χ of noisy p and χ has the scatter of q to 1 %, and no bias.
    rng = np.random.default_rng(2)
    q, u = MIN_SIGNAL + rng.standard_normal(400_000), rng.standard_normal(400_000)
    amount, angle = np.hypot(q, u), 0.5 * np.arctan2(u, q)
    assert np.mean(amount) == pytest.approx(5.10107, abs=0.006)  # Rice mean, Simmons & Stewart 1985
    assert np.degrees(np.std(angle)) == pytest.approx(5.858, abs=0.03)
    np.testing.assert_allclose(amount * np.cos(2 * angle), q, atol=1e-12)


@pytest.mark.parametrize("degrees", [0.0, 22.5, 70.0, 135.0, -30.0])
def test_values_and_errors(tmp_path: Path, degrees: float) -> None:
    p, sigma = 0.3, 0.03
    spread = np.degrees(sigma / (2 * p))
    pair = (f"5,evpa,{degrees},{spread}", f"5,polarised_fraction,{p},{sigma}")
    flare = read(tmp_path, *pair, "20,flux,1,0.2")
    assert [KINDS[code] for code in flare.kind] == ["flux", "q", "u", "flux"]
    # PHYSICS: q = Q/I = p cos 2χ, u = p sin 2χ, north through east.
    chi = np.radians(degrees)
    np.testing.assert_allclose(flare.value[1:3], [p * np.cos(2 * chi), p * np.sin(2 * chi)], atol=1e-14)
    np.testing.assert_allclose(flare.error[1:3], sigma, rtol=1e-12)


def test_the_larger_error_is_taken(tmp_path: Path) -> None:
    wide = np.degrees(1.5 * 0.03 / (2 * 0.3))
    flare = read(tmp_path, f"5,evpa,10,{wide}", "5,polarised_fraction,0.3,0.03", "20,flux,1,0.2")
    np.testing.assert_allclose(flare.error[1:3], 0.045)


@pytest.mark.parametrize(
    ("rows", "reason"),
    [
        (["5,evpa,10,3", "20,flux,1,.1"], "row 2: evpa needs one polarised_fraction at the same time"),
        (["5,polarised_fraction,.3,.03", "6,evpa,1,3"], "row 3: evpa needs one polarised_fraction"),
        (["5,polarised_fraction,.3,.03", "20,flux,1,.1"], "row 2: polarised_fraction needs one evpa"),
        (["5,evpa,10,5", "5,polarised_fraction,.3,.07"], "row 3: polarised_fraction is only 4.3 times"),
        (["5,evpa,10,6", "5,polarised_fraction,.3,.05"], "row 2: error of evpa is 6.0 deg; above 5.86"),
        (["5,evpa,10,5", "5,polarised_fraction,.3,.01"], "row 2: error of evpa is 5.2 times .* correlated"),
        (["5,evpa,10,3", "5,polarised_fraction,.3,.03", "7,q,.1,.1"], "count twice; keep one of the two"),
    ],
)
def test_refusals_say_why(tmp_path: Path, rows: list[str], reason: str) -> None:
    with pytest.raises(UserError, match=reason):
        read(tmp_path, *rows)
