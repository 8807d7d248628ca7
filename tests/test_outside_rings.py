"""Rings, chains and the square lattice against published and exact values.

Sources stand in tests/references.py; "from memory" there marks a recalled value.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from tests import references as ref
from tests.solving import lattice_mapping, levels_of, reduced, repeated
from tests.strategies import ring


@cache
def ring_levels(n, spin=0.5):
    """All levels of the uniform ring of n spins, J = 1."""
    return levels_of(ring(n, spin))


@cache
def square_levels(size):
    """All levels of a periodic square cluster; size: rows of the superlattice matrix."""
    rows = [list(row) for row in size]
    return levels_of(lattice_mapping("square", rows, {"nearest": 1.0}))


SQUARE_16 = ((4, 0), (0, 4))


def lowest(levels, total_spin=None):
    """The lowest energy, of one total spin where given."""
    energy = levels["energy"].values
    if total_spin is not None:
        energy = energy[levels["total_spin"].values == total_spin]
    return float(energy.min())


# --- Ground states and gaps ------------------------------------------------------------------


@pytest.mark.parametrize("n", [4, 6, 8, 10, 12, 14, 16])
def test_ring_ground_states(n):
    """Bethe (1931), Hulthen (1938): the printed values, and the equations solved here (exact)."""
    energy = lowest(ring_levels(n))
    assert energy == pytest.approx(ref.RING_GROUND_STATES[n], abs=6e-10)
    assert energy == pytest.approx(ref.bethe_ground_state(n), abs=1e-11)
    assert lowest(ring_levels(n), total_spin=0) == energy


def test_ring_of_18():
    """Bethe equations at N = 18 (exact), and the states all there."""
    levels = ring_levels(18)
    assert lowest(levels) == pytest.approx(ref.RING_GROUND_STATES[18], abs=6e-10)
    assert lowest(levels) == pytest.approx(ref.bethe_ground_state(18), abs=1e-11)
    assert levels["weight"].values.sum() == 2**18


def test_ring_energies_close_on_hulthen():
    """E0/N of even rings rises to 1/4 - ln 2 (Hulthen 1938, exact) as 1/N^2, from below."""
    sizes = np.array([8, 10, 12, 14, 16])
    below = np.array([ref.CHAIN_ENERGY - lowest(ring_levels(int(n))) / n for n in sizes])
    assert np.all(below > 0)
    assert np.all(np.diff(below) < 0)
    # Conformal finite-size law: E0/N = e - pi c v/(6 N^2), c = 1, v = pi/2 (Affleck; Bloete,
    # Cardy and Nightingale 1986), times 1 + O(1/ln^3 N), above 1 and falling (from memory).
    ratio = below * sizes**2 / (np.pi**2 / 12)
    assert np.all(np.diff(ratio) < 0)
    assert np.all(ratio > 1)
    assert np.all(ratio - 1 < 1 / np.log(sizes) ** 3)


def test_square_16():
    """4x4 periodic square: E0 and first triplet (widely tabulated; from memory, redone)."""
    levels = square_levels(SQUARE_16)
    ground = lowest(levels)
    assert ground == pytest.approx(ref.SQUARE_16_ENERGY, abs=6e-10)
    assert lowest(levels, total_spin=0) == ground
    assert lowest(levels, total_spin=1) - ground == pytest.approx(ref.SQUARE_16_GAP, abs=6e-10)
    # The gap is the triplet's: nothing lies between.
    energy = np.sort(levels["energy"].values)
    assert energy[energy > ground + 1e-9][0] == pytest.approx(
        ref.SQUARE_16_ENERGY + ref.SQUARE_16_GAP, abs=2e-9
    )


def test_spin_1_rings_close_on_the_haldane_gap():
    """Golinelli, Jolicoeur and Lacaze, Phys. Rev. B 50, 3037 (1994): gap 0.41049(2), E0/N =
    -1.401485(2) (paper). Even rings come from above (gap) and below (energy)."""
    sizes = [4, 6, 8, 10]
    ground = [lowest(ring_levels(n, 1.0), 0) for n in sizes]
    triplet = [lowest(ring_levels(n, 1.0), 1) for n in sizes]
    assert ground == [lowest(ring_levels(n, 1.0)) for n in sizes]
    gaps = np.array(triplet) - ground
    energies = np.array(ground) / sizes
    # By hand for N = 4: sublattice spins 2 and 2 make E = (J/2)[S(S+1) - 12], so -6 and -5.
    assert ground[0] == pytest.approx(-6, abs=1e-12)
    assert gaps[0] == pytest.approx(1, abs=1e-12)
    for values, limit in [(gaps, ref.HALDANE_GAP), (-energies, -ref.HALDANE_ENERGY)]:
        assert np.all(values > limit)
        assert np.all(np.diff(values) < 0)

        def shanks(a, b, c):
            # Exact where the approach is geometric; here it is so but for a power of N.
            return c - (c - b) ** 2 / ((c - b) - (b - a))

        first, second = shanks(*values[:3]), shanks(*values[1:])
        # Each step halves the distance at least, and the last lies within a tenth of the gap.
        assert abs(first - limit) < 0.6 * (values[2] - limit)
        assert abs(second - limit) < 0.6 * abs(first - limit)
        assert abs(second - limit) < 0.1 * ref.HALDANE_GAP


# --- High-temperature series -----------------------------------------------------------------


def moments(levels, order):
    """Tr H^k / n and Tr M^2 H^k / n for k = 0 ... order, from the table of levels.

    A multiplet of spin S has M^2 = S(S+1)/3 on average. Sums in extended precision.
    """
    energy = levels["energy"].values.astype(np.longdouble)
    weight = levels["weight"].values.astype(np.longdouble)
    weight = weight / weight.sum()
    spin = levels["total_spin"].values.astype(np.longdouble)
    square = spin * (spin + 1) / 3
    plain = [(weight * energy**k).sum() for k in range(order + 1)]
    magnetic = [(weight * square * energy**k).sum() for k in range(order + 1)]
    return np.array(plain), np.array(magnetic)


def power_series(levels, sites, order):
    """Coefficients of K^0 ... K^order of ln(Z)/N - ln 2 and of 4 T chi per site.

    Z/n = sum (-K)^k Tr H^k/(n k!); the logarithm and the quotient by the usual recursions.
    """
    plain, magnetic = moments(levels, order)
    sign_over_factorial = np.cumprod([1.0, *(-1.0 / k for k in range(1, order + 1))])
    z, m = plain * sign_over_factorial, magnetic * sign_over_factorial
    logarithm, quotient = np.zeros_like(z), np.zeros_like(z)
    for k in range(order + 1):
        quotient[k] = m[k] - sum(quotient[i] * z[k - i] for i in range(k))
        if k:
            logarithm[k] = z[k] - sum(i * logarithm[i] * z[k - i] for i in range(1, k)) / k
    return logarithm / sites, 4 * quotient / sites


def heat_series(logarithm):
    """C = K^2 d2(lnZ)/dK2, coefficient by coefficient."""
    k = np.arange(len(logarithm))
    return k * (k - 1) * logarithm


def rounding(levels, sites, bonds):
    """What doubles leave of a level found by the S^2 shift: it is the difference of
    E + Lambda S(S+1) and Lambda S(S+1), with Lambda of the size of the bounds of the bandwidth,
    one J for each bond; S goes up to N/2."""
    assert levels.attrs["resolved"] == "total_spin"
    return np.finfo(float).eps * bonds * (sites / 2) * (sites / 2 + 1)


def test_chain_series_from_traces():
    """All listed orders, K^0 to K^11, from the 12-site ring's traces (redone; Johnston et al.,
    Phys. Rev. B 61, 9558 (2000) and earlier print them)."""
    logarithm, chi = power_series(ring_levels(12), 12, 11)
    noise = rounding(ring_levels(12), 12, 12)  # 1e-13
    assert np.abs(chi - [float(c) for c in ref.CHAIN_CHI_SERIES]).max() < noise
    heat = heat_series(logarithm)
    assert np.abs(heat - [float(c) for c in ref.CHAIN_C_SERIES]).max() < noise


@pytest.mark.parametrize("n", [7, 8, 9, 10, 11])
def test_a_ring_carries_the_orders_below_its_length(n):
    """Below K^N the ring is the infinite chain; at K^N the bonds can close around it."""
    _, chi = power_series(ring_levels(n), n, n)
    difference = np.abs(chi - [float(c) for c in ref.CHAIN_CHI_SERIES[: n + 1]])
    assert difference[:n].max() < rounding(ring_levels(n), n, n)
    assert difference[n] > 1e-9


def test_chain_series_from_warm_curves():
    """The curves of the 12-site ring at high T are the series' sums (remainder of order K^12)."""
    for t in [12.0, 25.0, 50.0]:
        curves = reduced(ring_levels(12), t)
        k = 1 / t
        heat = sum(float(c) * k**i for i, c in enumerate(ref.CHAIN_C_SERIES))
        chi = sum(float(c) * k**i for i, c in enumerate(ref.CHAIN_CHI_SERIES)) / (4 * t)
        assert curves["specific_heat"][0, 0] == pytest.approx(heat, rel=1e-11)
        assert curves["susceptibility"][0, 0] == pytest.approx(chi, rel=1e-11)


# A periodic cluster's series is the infinite lattice's as long as no set of bonds closes around
# it: a term of order K^n involves at most n bonds, and such a loop has at least L of them, L
# the least |x| + |y| over the superlattice's vectors. So orders below L are exact. At order L
# the only new terms are single loops of L bonds, and each adds what a ring of L spins has
# beyond the chain: N c(cluster) = N c(lattice) + loops * L (c(ring L) - c(chain)). There are
# N/L loops for each shortest way round (a vector (a, b) has (a + b)!/(a! b!) ways; +- once).
SQUARES = [
    # rows of the superlattice, sites, L, ways round
    (SQUARE_16, 16, 4, 2),  # (4,0), (0,4): one way each
    (((3, 2), (-2, 3)), 13, 5, 20),  # (3,2), (-2,3): ten each
    (((3, 3), (3, -3)), 18, 6, 42),  # (3,3), (3,-3): twenty each; (6,0), (0,6): one each
]


@pytest.mark.parametrize(("rows", "sites", "length", "ways"), SQUARES)
def test_square_series(rows, sites, length, ways):
    """Square lattice, linked-cluster series (redone), to the order the cluster carries, and one
    order more with the loops around it taken off."""
    got = power_series(square_levels(rows), sites, length)
    noise = rounding(square_levels(rows), sites, 2 * sites)  # 7e-13 at most
    around = power_series(ring_levels(length), length, length)
    chain_log = [float(c) / (k * (k - 1)) if k > 1 else 0.0
                 for k, c in enumerate(ref.CHAIN_C_SERIES)]  # fmt: skip
    chain = (chain_log, [float(c) for c in ref.CHAIN_CHI_SERIES])
    want = (ref.SQUARE_LOG_Z_SERIES, ref.SQUARE_CHI_SERIES)
    for series, ring_series, chain_series, exact in zip(got, around, chain, want, strict=True):
        exact = np.array([float(c) for c in exact[: length + 1]])
        series = series.astype(float)
        assert np.abs(series[:length] - exact[:length]).max() < noise
        loops_per_site = ways / length
        extra = loops_per_site * length * (float(ring_series[length]) - chain_series[length])
        assert abs(extra) > 1e-6
        assert series[length] - extra == pytest.approx(exact[length], abs=noise)


# --- Maxima of the infinite chain ------------------------------------------------------------


@cache
def maximum(n, name):
    """(T, value) of a ring's broad maximum."""
    found = minimize_scalar(
        lambda t: -reduced(ring_levels(n), t)[name][0, 0],
        bounds=(0.3, 1.2),
        method="bounded",
        options={"xatol": 1e-8},
    )
    return float(found.x), float(-found.fun)


MAXIMA = [
    ("susceptibility", ref.CHAIN_CHI_MAX_AT, ref.CHAIN_CHI_MAX, 4e-5),
    ("specific_heat", ref.CHAIN_C_MAX_AT, ref.CHAIN_C_MAX, 4e-3),
]


@pytest.mark.parametrize(("name", "at", "value", "_near"), MAXIMA)
def test_chain_maxima_are_bracketed(name, at, value, _near):
    """Kluemper and Johnston (2000), Johnston et al. (2000) (paper, from memory): the rings of
    11 and 12 lie on either side, in the value at the peak's temperature and of their own peaks."""
    at_the_peak = sorted(reduced(ring_levels(n), at)[name][0, 0] for n in (11, 12))
    assert at_the_peak[0] < value < at_the_peak[1]
    own = sorted(maximum(n, name)[1] for n in (11, 12))
    assert own[0] < value < own[1]


@pytest.mark.parametrize(("name", "at", "value", "near"), MAXIMA)
def test_chain_maxima_are_approached(name, at, value, near):
    """The same values: rings of 8 to 14 come closer step by step, odd from one side and even
    from the other, down to ``near`` relative at N = 14."""
    for sizes in ([8, 10, 12, 14], [7, 9, 11, 13]):
        distance = np.array([maximum(n, name)[1] - value for n in sizes])
        assert np.all(np.sign(distance) == np.sign(distance[0]))
        assert np.all(np.abs(distance[1:]) < 0.6 * np.abs(distance[:-1]))
    assert maximum(14, name)[1] == pytest.approx(value, rel=near)
    assert maximum(14, name)[0] == pytest.approx(at, rel=10 * near)


def test_chain_at_low_temperature_tends_to_its_limits():
    """C -> (2/3) T (paper, from memory) and chi -> 1/pi^2 from above, with infinite slope
    (Johnston et al. 2000, from memory): a coarse check where a ring of 16 is still long."""
    curves = reduced(ring_levels(16), [0.25])
    assert 1 / np.pi**2 < curves["susceptibility"][0, 0] < ref.CHAIN_CHI_MAX
    assert curves["specific_heat"][0, 0] / 0.25 == pytest.approx(2 / 3, rel=0.35)


# --- Alternating chain -----------------------------------------------------------------------


def alternating(alpha):
    """Levels of six dimers in a ring, J = 1 and alpha by turns."""
    return levels_of(lattice_mapping("chain", [12], {"strong": 1.0, "weak": float(alpha)}))


def fitted(alphas, values, order):
    """Taylor coefficients of a smooth function from its values at Chebyshev points."""
    domain = (0.0, alphas[-1] + alphas[0])
    fit = np.polynomial.Chebyshev.fit(alphas, values, len(alphas) - 1, domain=domain)
    return fit.convert(kind=np.polynomial.Polynomial).coef[: order + 1]


def test_alternating_chain_series():
    """Barnes, Riera and Tennant, Phys. Rev. B 59, 11384 (1999) (paper, redone on 12 sites): six
    dimers in a ring carry every order below the sixth."""
    count, width = 11, 0.3
    alphas = width / 2 * (1 - np.cos(np.pi * (np.arange(count) + 0.5) / count))
    ground, gap = [], []
    for alpha in alphas:
        levels = alternating(alpha)
        ground.append(lowest(levels, 0))
        gap.append(lowest(levels, 1) - ground[-1])
        assert ground[-1] == lowest(levels)
    energy = fitted(alphas, np.array(ground) / 12, 4)
    excitation = fitted(alphas, np.array(gap), 4)
    # Interpolation in eleven points: 1e-14 of noise grows by 1e6 in the fourth coefficient, and
    # the eleventh power that is cut off is 0.3^11/4^10.
    tolerance = np.array([1e-11, 1e-9, 1e-7, 1e-6, 3e-5])
    assert np.all(np.abs(energy - [float(c) for c in ref.ALTERNATING_ENERGY]) < tolerance)
    assert np.all(np.abs(excitation - [float(c) for c in ref.ALTERNATING_GAP]) < tolerance)


def test_alternating_chain_at_its_ends():
    """alpha = 0: dimers (exact); alpha = 1: the uniform ring."""
    for t in [0.1, 0.5, 2.0]:
        dimers = reduced(alternating(0.0), t)
        assert dimers["specific_heat"][0, 0] == pytest.approx(
            ref.dimer_specific_heat(t) / 2, rel=1e-10
        )
        uniform = reduced(alternating(1.0), t)
        for name, values in reduced(ring_levels(12), t).items():
            assert values[0, 0] == pytest.approx(uniform[name][0, 0], rel=1e-10, abs=1e-13)


def test_every_state_is_there():
    """The 12-ring: 4096 states, mirror-symmetric counting of levels and states."""
    assert len(repeated(ring_levels(12))) == 4096
    assert lowest(ring_levels(12), 6) == pytest.approx(3.0, abs=1e-12)  # all parallel: N/4
