"""What surrounds the spins of a cluster: free ions, neighbouring clusters, the lattice's heat.

Each function returns a value together with its exact derivatives. Energies, temperatures and
fields share one unit (k_B = 1) unless said otherwise.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.ensemble.slopes import PointSlopes

Vector = NDArray[np.float64]

# Below this, 1 + a·χ counts as an ordering of the clusters, where a molecular field of
# paramagnets says nothing; held here so that a minimiser can find its way back.
ORDERED = 1e-3
NEWTON_STEPS = 80
# Below this the integral of the Debye function is done whole, above its tail is negligible.
DEBYE_SPLIT = 30.0
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(96)


@dataclass(frozen=True, eq=False)
class Natural:
    """Per ion at n points: C/k_B ``heat``, ⟨M⟩ ``moment``, zero-field ``chi`` = ⟨δM²⟩/T; each
    (n,) as a value, or (k, n) as derivatives."""

    heat: Vector
    moment: Vector
    chi: Vector


@dataclass(frozen=True, eq=False)
class Response:
    """A Natural with derivatives along k directions of the couplings, by the field h = g μ_B B,
    and by ``extra``: the molecular field's strength a, or the Weiss temperature."""

    value: Natural
    along: Natural
    by_field: Natural
    by_extra: Natural


def lone_clusters(found: PointSlopes, t: Vector, n_sites: int) -> Response:
    """Clusters that do not feel each other, from the sums of one of them."""
    v, s, f = found.value, found.by_slope, found.by_field
    zero = np.zeros_like(v.heat)
    return Response(
        Natural(v.heat / n_sites, v.moment / n_sites, v.variance / t / n_sites),
        Natural(s.heat / n_sites, s.moment / n_sites, s.variance / t / n_sites),
        Natural(f.heat / n_sites, f.moment / n_sites, f.variance / t / n_sites),
        Natural(zero, zero, zero),
    )


def coupled_clusters(
    at: Callable[[Vector], PointSlopes], t: Vector, h: Vector, n_sites: int, a: float, spin: float
) -> tuple[Response, NDArray[np.bool_]]:
    """Clusters in the mean field of their neighbours, and where they would order.

    Every ion feels h − a m, m = ⟨M⟩ per ion, so χ = χ₀/(1 + a χ₀) at zero field, and the heat
    C = C₀ − T a (∂m/∂T)²/(1 + a ∂m/∂h), C₀ that at the field felt. ``at`` gives the sums of a
    cluster at fields (n,); ``spin`` is the largest m. Thermodynamics of H_MF with the usual
    double-counting term, in the paramagnetic state only.
    """
    found = _felt_field(at, t, h, n_sites, a, spin)
    v, s, f = found.value, found.by_slope, found.by_field
    n = n_sites
    m, chi = v.moment / n, v.variance / t / n  # chi = ∂m/∂h
    bare = 1 + a * chi
    ordered = bare <= ORDERED
    d = np.maximum(bare, ORDERED)
    m_t = v.mixed / t**2 / n
    heat = v.heat / n - t * a * m_t**2 / d

    def total(
        m_x: Vector, heat_x: Vector, chi_x: Vector, m_tx: Vector, h_x: Vector | float, a_x: float
    ) -> Natural:
        """Derivatives by x from those at fixed field felt, the bare field's, and a's."""
        moved = (m_x + chi * (h_x - a_x * m)) / d  # of m
        shift = h_x - a * moved - a_x * m  # of the field felt
        chi_all = chi_x + f.variance / t / n * shift
        m_t_all = m_tx + f.mixed / t**2 / n * shift
        d_all = a_x * chi + a * chi_all
        return Natural(
            heat_x + f.heat / n * shift
            - t * (a_x * m_t**2 / d + 2 * a * m_t * m_t_all / d - a * m_t**2 * d_all / d**2),
            moved,
            (chi_all * d - chi * d_all) / d**2,
        )  # fmt: skip

    zero = np.zeros_like(m)
    along = total(
        s.moment / n, s.heat / n, s.variance / t / n, s.mixed / t**2 / n, 0.0, 0.0
    )  # fmt: skip
    return (
        Response(
            Natural(heat, m, chi / d),
            along,
            total(zero, zero, zero, zero, 1.0, 0.0),
            total(zero, zero, zero, zero, 0.0, 1.0),
        ),
        ordered,
    )


def _felt_field(
    at: Callable[[Vector], PointSlopes], t: Vector, h: Vector, n: int, a: float, spin: float
) -> PointSlopes:
    """The sums at the field x = h − a m(x) that every ion feels: Newton steps kept inside a
    bracket."""
    sign = np.where(h < 0, -1.0, 1.0)
    size = np.abs(h)
    # m lies between 0 and ``spin``; x − h + a m(x) changes sign between the ends.
    low, high = np.minimum(size, size - a * spin), np.maximum(size, size - a * spin)
    x = size.copy()
    found = at(sign * x)
    if a == 0 or not np.any(h):
        return found
    for _ in range(NEWTON_STEPS):
        m, chi = sign * found.value.moment / n, found.value.variance / t / n
        misfit = x - size + a * m
        high, low = np.where(misfit > 0, x, high), np.where(misfit <= 0, x, low)
        steep = 1 + a * chi
        step = np.where(steep > 0, x - misfit / np.where(steep > 0, steep, 1.0), np.nan)
        inside = (step >= low) & (step <= high)
        following = np.where(inside, step, (low + high) / 2)
        following = np.where(size == 0, 0.0, following)
        done = np.abs(following - x) <= 1e-14 * np.maximum(np.abs(x), size)
        x = following
        found = at(sign * x)
        if done.all():
            break
    return found


def free_ions(
    shares: Sequence[tuple[float, float]], t: Vector, h: Vector, weiss: float
) -> Response:
    """The mean free ion of ``shares`` (spin, share), with T − θ in place of T.

    m = m₀(h/(T−θ)) and, from the same free energy, C = T/(T−θ) C₀(h/(T−θ)); ``extra`` is θ.
    Where T ≤ θ, T − θ is held at T/1000.
    """
    rest = np.maximum(t - weiss, 1e-3 * t)
    x = h / rest
    zero = np.zeros_like(t)
    m, v, w, curie = zero.copy(), zero.copy(), zero.copy(), 0.0
    for spin, share in shares:
        states = np.arange(round(2 * spin) + 1) - spin
        exponent = states[:, None] * x
        p = np.exp(exponent - exponent.max(axis=0))  # of either sign of g
        p = p / p.sum(axis=0)
        mean = states @ p
        # About the mean, so that nothing cancels where the ion is saturated.
        off = states[:, None] - mean
        m += share * mean
        v += share * np.sum(off**2 * p, axis=0)
        w += share * np.sum(off**3 * p, axis=0)
        curie += share * spin * (spin + 1) / 3
    stretch = t / rest
    heat = stretch * v * x**2
    heat_x = stretch * (2 * x * v + x**2 * w)
    x_weiss = x / rest
    return Response(
        Natural(heat, m, curie / rest),
        Natural(np.empty((0, len(t))), np.empty((0, len(t))), np.empty((0, len(t)))),
        Natural(heat_x / rest, v / rest, zero),
        Natural(heat / rest + heat_x * x_weiss, v * x_weiss, curie / rest**2),
    )


def debye(t: Vector, theta: float) -> tuple[Vector, Vector]:
    """C/(3 N k_B) of Debye's lattice, and its derivative by θ; both (n,).

    D(x) = 3/x³ ∫₀ˣ y⁴eʸ/(eʸ−1)² dy, x = θ/T (Debye, Ann. Phys. 344, 789 (1912)); to 10⁻¹³.
    """
    x = theta / t
    reach = np.minimum(x, DEBYE_SPLIT)
    y = reach[:, None] * (_NODES + 1) / 2
    integral = (_debye_kernel(y) @ _WEIGHTS) * reach / 2
    # Beyond: ∫ y⁴e^{−y}(1 + 2e^{−y}…) dy, of which the first term is left at y > 30.
    far = x > DEBYE_SPLIT
    integral = integral + np.where(far, _tail(reach) - _tail(np.maximum(x, reach)), 0.0)
    value = 3 * integral / x**3
    return value, (-3 * value + 3 * _debye_kernel(x) / x**2) / x / t


def _debye_kernel(y: Vector) -> Vector:
    half = np.minimum(y / 2, 350.0)
    small = half < 1e-4
    safe = np.where(small, 1.0, half)
    found: Vector = np.where(small, y**2 * (1 - y**2 / 12), y**4 / (4 * np.sinh(safe) ** 2))
    return found


def _tail(y: Vector) -> Vector:
    """∫_y^∞ y⁴e^{−y} dy."""
    capped = np.minimum(y, 700.0)
    found: Vector = np.exp(-capped) * (
        capped**4 + 4 * capped**3 + 12 * capped**2 + 24 * capped + 24
    )
    return found


def einstein(t: Vector, theta: float) -> tuple[Vector, Vector]:
    """C/(3 N k_B) of Einstein's lattice, x²eˣ/(eˣ−1)², and its derivative by θ; both (n,)."""
    x = theta / t
    half = np.minimum(x / 2, 350.0)
    value = np.where(half < 1e-6, 1 - half**2 / 3, (half / np.sinh(np.maximum(half, 1e-6))) ** 2)
    slope = value * (1 - half / np.tanh(np.maximum(half, 1e-6))) * 2
    slope = np.where(half < 1e-3, -(2 / 3) * half**2 * (1 - (4 / 15) * half**2), slope)
    return value, slope / np.maximum(x, 1e-300) / t
