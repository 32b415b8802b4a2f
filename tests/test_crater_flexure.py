"""Rebound of an elastic plate: numbers, closed form against quadrature, limits."""

import itertools

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import j0, j1

from gravbasin.crater.flexure import Plate, Rebound
from gravbasin.errors import InputError


@pytest.mark.parametrize("radius", [0.0, 20e3, 49e3, 51e3, 120e3, 400e3])
def test_closed_form_is_the_hankel_integral(radius: float) -> None:
    """w(r) = (rho h / rho_m) A ∫ J1(kA) J0(kr) / (1 + (ell k)^4) dk, to 0.01 m of 1000 m removed."""
    plate = Plate(30e3)
    rebound = Rebound(plate, 50e3, 1000.0, 2700.0)

    def integrand(k: float) -> float:
        return float(j1(k * 50e3) * j0(k * radius) / (1 + (plate.length * k) ** 4))

    steps = np.linspace(0.0, 60.0 / plate.length, 121)
    total = sum(quad(integrand, a, b, epsabs=1e-14)[0] for a, b in itertools.pairwise(steps))
    assert rebound.rise(radius) == pytest.approx(2700 / 3300 * 1000 * 50e3 * total, abs=0.01)


def test_rise_and_its_slope_are_continuous_at_the_edge_of_the_disc() -> None:
    rebound = Rebound(Plate(40e3), 80e3, 1500.0, 2700.0)
    r = 80e3 + np.array([-2.0, -1.0, 1.0, 2.0])
    w = rebound.rise(r)
    assert abs(w[2] - w[1]) < 0.1
    assert (w[1] - w[0]) / 1.0 == pytest.approx((w[3] - w[2]) / 1.0, rel=1e-3)


def test_limits() -> None:
    wide = Rebound(Plate(5e3), 500e3, 1000.0, 2700.0)
    assert wide.rise(0.0) == pytest.approx(2700 / 3300 * 1000, abs=0.1)  # local isostasy: 0.818 of the erosion
    assert Rebound(Plate(40e3), 50e3, 0.0, 2700.0).rise(0.0) == 0.0
    assert abs(wide.rise(900e3)) < 1.0
    with pytest.raises(InputError, match="flexural lengths"):
        Rebound(Plate(10.0), 500e3, 1000.0, 2700.0)
