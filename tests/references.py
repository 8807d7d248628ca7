"""Check values from outside the project, each with its source and how it was had.

exact: a closed form; paper: a published value; "from memory" marks one recalled, not seen.
H = +J sum S_i.S_j, each bond once, J = 1; k_B = g = mu_B = 1; x = J/T. Evaluated by mpmath.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from math import comb

import mpmath
from mpmath import mp, mpf

DIGITS = 120  # so that second derivatives keep 30 digits even where C is 1e-60

# Twenty-five temperatures from 0.02 J to 50 J.
TEMPERATURES = [0.02 * 2500 ** (k / 24) for k in range(25)]


@dataclass(frozen=True)
class ClosedForm:
    """A cluster's ln Z(x) (absolute energies) and, where there is one, chi*T(x) per cluster."""

    sites: int
    log_z: Callable[[mpf], mpf]
    chi_t: Callable[[mpf], mpf] | None = None

    def specific_heat(self, temperature: float) -> float:
        """C per cluster, x^2 d2 lnZ/dx2."""
        with mpmath.workdps(DIGITS):
            x = 1 / mpf(temperature)
            return float(x**2 * mp.diff(self.log_z, x, 2))

    def internal_energy(self, temperature: float) -> float:
        """Per cluster, -d lnZ/dx."""
        with mpmath.workdps(DIGITS):
            return float(-mp.diff(self.log_z, 1 / mpf(temperature)))

    def free_energy(self, temperature: float) -> float:
        """Per cluster, -T lnZ."""
        with mpmath.workdps(DIGITS):
            return float(-mpf(temperature) * self.log_z(1 / mpf(temperature)))

    def entropy(self, temperature: float) -> float:
        """Per cluster, (U - F)/T."""
        with mpmath.workdps(DIGITS):
            x = 1 / mpf(temperature)
            return float(self.log_z(x) - x * mp.diff(self.log_z, x))

    def susceptibility(self, temperature: float) -> float:
        """chi per cluster."""
        assert self.chi_t is not None
        with mpmath.workdps(DIGITS):
            t = mpf(temperature)
            return float(self.chi_t(1 / t) / t)


# --- Closed-form clusters ------------------------------------------------------------------
# Bleaney and Bowers, Proc. R. Soc. A 214, 451 (1952); Kambe, J. Phys. Soc. Jpn 5, 48 (1950).
# Exact; chi*T = sum n_S S(S+1)(2S+1) exp(-E/T) / 3Z.


def _exp(x: mpf) -> mpf:
    return mp.exp(x)


# Triplet at +1/4, singlet at -3/4.
DIMER = ClosedForm(
    2,
    log_z=lambda x: -x / 4 + mp.log(3 + _exp(x)),
    chi_t=lambda x: 2 / (3 + _exp(x)),
)


def dimer_specific_heat(temperature: float) -> float:
    """C = 3 x^2 e^x/(3 + e^x)^2 per dimer (exact, as above)."""
    with mpmath.workdps(DIGITS):
        x = 1 / mpf(temperature)
        return float(3 * x**2 * _exp(x) / (3 + _exp(x)) ** 2)


# Two doublets at -3/4, a quartet at +3/4.
EQUILATERAL_TRIMER = ClosedForm(
    3,
    log_z=lambda x: mp.log(4) + 3 * x / 4 + mp.log(1 + _exp(-3 * x / 2)),
    chi_t=lambda x: (1 + 5 * _exp(-3 * x / 2)) / (1 + _exp(-3 * x / 2)) / 4,
)

# Doublets at -1 and 0, a quartet at +1/2.
LINEAR_TRIMER = ClosedForm(
    3,
    log_z=lambda x: mp.log(2) + mp.log(_exp(x) + 1 + 2 * _exp(-x / 2)),
    chi_t=lambda x: (_exp(x) + 1 + 10 * _exp(-x / 2)) / (_exp(x) + 1 + 2 * _exp(-x / 2)) / 4,
)

FOUR_RING = ClosedForm(
    4,
    log_z=lambda x: mp.log(_exp(2 * x) + 3 * _exp(x) + 7 + 5 * _exp(-x)),
    chi_t=lambda x: (
        (2 * _exp(x) + 4 + 10 * _exp(-x)) / (_exp(2 * x) + 3 * _exp(x) + 7 + 5 * _exp(-x))
    ),
)

# E = (J/2)[S(S+1) - 4]: -2, -1, +1.
SPIN_1_DIMER = ClosedForm(
    2,
    log_z=lambda x: mp.log(_exp(2 * x) + 3 * _exp(x) + 5 * _exp(-x)),
    chi_t=lambda x: (2 * _exp(x) + 10 * _exp(-x)) / (_exp(2 * x) + 3 * _exp(x) + 5 * _exp(-x)),
)


def from_multiplets(sites: int, multiplets: list[tuple[Fraction, Fraction, int]]) -> ClosedForm:
    """A closed form from (energy, S, number of multiplets)."""

    def number(value: Fraction) -> mpf:
        return mpf(value.numerator) / value.denominator

    def log_z(x: mpf) -> mpf:
        return mp.log(
            mp.fsum(n * number(2 * s + 1) * _exp(-number(e) * x) for e, s, n in multiplets)
        )

    def chi_t(x: mpf) -> mpf:
        top = mp.fsum(
            n * number(s * (s + 1) * (2 * s + 1)) * _exp(-number(e) * x) for e, s, n in multiplets
        )
        return top / 3 / mp.exp(log_z(x))

    return ClosedForm(sites, log_z, chi_t)


def complete_graph(sites: int) -> ClosedForm:
    """K_N of spins 1/2: E = (J/2)[S(S+1) - 3N/4], n_S = C(N, N/2-S) - C(N, N/2-S-1); exact."""
    multiplets = []
    for down in range(sites // 2 + 1):
        s = Fraction(sites, 2) - down
        n = comb(sites, down) - (comb(sites, down - 1) if down else 0)
        multiplets.append(((s * (s + 1) - Fraction(3 * sites, 4)) / 2, s, n))
    return from_multiplets(sites, multiplets)


def spin_dimer(twice_spin: int) -> ClosedForm:
    """Dimer of spins s: E = (J/2)[S(S+1) - 2s(s+1)], S = 0 ... 2s; exact."""
    s = Fraction(twice_spin, 2)
    levels = [
        ((Fraction(k) * (k + 1) - 2 * s * (s + 1)) / 2, Fraction(k), 1)
        for k in range(twice_spin + 1)
    ]
    return from_multiplets(2, levels)


# Per spin of the spin-1/2 dimer (exact; the maxima of the closed forms above).
DIMER_CHI_MAX, DIMER_CHI_MAX_AT = 0.20118191, 0.62361801
DIMER_C_MAX, DIMER_C_MAX_AT = 0.51174528, 0.35149521


# --- XX rings and chains: free fermions ----------------------------------------------------
# Lieb, Schultz and Mattis, Ann. Phys. 16, 407 (1961); Katsura, Phys. Rev. 127, 1508 (1962).
# H = sum [J(SxSx + SySy) - h Sz], eps_k = J cos k - h. Exact.


def xx_ring_log_z(sites: int, x: mpf, h: mpf, j: int = 1) -> mpf:
    """ln Z of the ring of N: both fermion parities, projected."""

    def products(momenta: list[mpf]) -> tuple[mpf, mpf]:
        plus = minus = mpf(1)
        for k in momenta:
            y = mp.exp(-(j * mp.cos(k) - h) * x)
            plus *= 1 + y
            minus *= 1 - y
        return plus, minus

    a_plus, a_minus = products([(2 * m + 1) * mp.pi / sites for m in range(sites)])
    p_plus, p_minus = products([2 * m * mp.pi / sites for m in range(sites)])
    return -h * sites * x / 2 + mp.log((a_plus + a_minus + p_plus - p_minus) / 2)


def xx_open_log_z(sites: int, x: mpf, h: mpf, j: int = 1) -> mpf:
    """ln Z of the open chain: product of 2 cosh(eps_m/2T), k_m = pi m/(N+1)."""
    return mp.fsum(
        mp.log(2 * mp.cosh((j * mp.cos(mp.pi * m / (sites + 1)) - h) * x / 2))
        for m in range(1, sites + 1)
    )


def in_field(log_z: Callable[[mpf, mpf], mpf], temperature: float, h: float) -> dict[str, float]:
    """All curves of a cluster from its ln Z(x, h), by derivatives."""
    with mpmath.workdps(DIGITS):
        t, field = mpf(temperature), mpf(h)
        x = 1 / t
        value = log_z(x, field)
        slope = mp.diff(lambda u: log_z(u, field), x)
        return {
            "free_energy": float(-t * value),
            "internal_energy": float(-slope),
            "entropy": float(value - x * slope),
            "specific_heat": float(x**2 * mp.diff(lambda u: log_z(u, field), x, 2)),
            "magnetization": float(t * mp.diff(lambda u: log_z(x, u), field)),
            "susceptibility": float(t * mp.diff(lambda u: log_z(x, u), field, 2)),
        }


def xx_infinite(temperature: float, h: float = 0.0) -> dict[str, float]:
    """Infinite XX chain, per site: f, C and chi_zz by quadrature of the closed forms."""
    with mpmath.workdps(30):
        t, field = mpf(temperature), mpf(h)

        def average(function: Callable[[mpf], mpf]) -> mpf:
            cuts = [mp.pi * i / 8 for i in range(9)]
            return mp.quad(lambda k: function((mp.cos(k) - field) / (2 * t)), cuts) / mp.pi

        return {
            "free_energy": float(-t * average(lambda y: mp.log(2 * mp.cosh(y)))),
            "internal_energy": float(-t * average(lambda y: y * mp.tanh(y))),
            "specific_heat": float(average(lambda y: (y * mp.sech(y)) ** 2)),
            "susceptibility": float(average(lambda y: mp.sech(y) ** 2) / (4 * t)),
        }


# h = 0, J = 1: chi_zz = T C - u, both peak together (redone from the closed forms).
XX_PEAK_AT, XX_PEAK_C, XX_PEAK_CHI = 0.31614344, 0.32600687, 0.36138118


# --- Ising ---------------------------------------------------------------------------------
# Ising, Z. Phys. 31, 253 (1925). Exact.


def ising_ring_log_z(sites: int, x: mpf, h: mpf | int = 0, j: int = 1) -> mpf:
    """ln Z of J sum SzSz - h sum Sz on a ring, by the two eigenvalues of the transfer matrix.

    At h = 0 these are 2 cosh(J/4T) and -2 sinh(J/4T).
    """
    first = mp.exp(-j * x / 4) * mp.cosh(h * x / 2)
    root = mp.sqrt(mp.exp(-j * x / 2) * mp.sinh(h * x / 2) ** 2 + mp.exp(j * x / 2))
    return mp.log((first + root) ** sites + (first - root) ** sites)


def ising_infinite(temperature: float, j: int = 1) -> dict[str, float]:
    """Per site at h = 0: C = (J/4T)^2 sech^2(J/4T), chi_zz T = exp(-J/2T)/4."""
    with mpmath.workdps(30):
        x = j / mpf(temperature)
        return {
            "specific_heat": float((x / 4 * mp.sech(x / 4)) ** 2),
            "susceptibility": float(mp.exp(-x / 2) / 4 / mpf(temperature)),
        }


# --- Uniform spin-1/2 chain ----------------------------------------------------------------
# Kluemper and Johnston, Phys. Rev. Lett. 84, 4677 (2000); Johnston et al., Phys. Rev. B 61,
# 9558 (2000); Bonner and Fisher, Phys. Rev. 135, A640 (1964). Paper, from memory.
CHAIN_CHI_MAX, CHAIN_CHI_MAX_AT = 0.146926279, 0.6408510
CHAIN_C_MAX, CHAIN_C_MAX_AT = 0.3497121235, 0.48028487
# Hulthen 1938, exact.
CHAIN_ENERGY = 0.25 - float(mp.log(2))

F = Fraction
# High-temperature series in K = J/T, coefficients of K^0, K^1, ...; redone elsewhere in exact
# integers on a 12-site ring, valid to K^11. A ring of N carries the orders below N.
CHAIN_CHI_SERIES = [  # 4 T chi
    F(1), F(-1, 2), F(0), F(1, 24), F(5, 384), F(-7, 1280), F(-133, 30720), F(1, 4032),
    F(1269, 1146880), F(3737, 18579456), F(-339691, 1486356480), F(-1428209, 13624934400),
]  # fmt: skip
CHAIN_C_SERIES = [
    F(0), F(0), F(3, 16), F(3, 32), F(-15, 256), F(-15, 256), F(21, 4096), F(917, 40960),
    F(1417, 327680), F(-4303, 688128), F(-334433, 110100480), F(37543, 31457280),
]  # fmt: skip

# Square lattice, infinite, by linked clusters (redone elsewhere to K^6).
SQUARE_LOG_Z_SERIES = [  # (ln Z)/N - ln 2
    F(0), F(0), F(3, 16), F(1, 32), F(-7, 512), F(-5, 512), F(13, 12288),
]  # fmt: skip
SQUARE_CHI_SERIES = [  # 4 T chi
    F(1), F(-1), F(1, 2), F(-1, 6), F(13, 192), F(-71, 1920), F(367, 46080),
]  # fmt: skip

# Ring ground states E0/J: Bethe equations; the smaller ones also by diagonalisation.
RING_GROUND_STATES = {
    4: -2.0, 6: -2.802775638, 8: -3.651093409, 10: -4.515446354, 12: -5.387390917,
    14: -6.263549534, 16: -7.142296361, 18: -8.022749087, 20: -8.904386530,
    22: -9.786880652, 24: -10.670014517,
}  # fmt: skip


def bethe_ground_state(sites: int) -> float:
    """E0 of the even ring from the Bethe equations (Bethe, Z. Phys. 71, 205 (1931)):
    N atan(2 l_j) = pi I_j + sum_k atan(l_j - l_k), E = N/4 - (1/2) sum 1/(l_j^2 + 1/4).

    The equations are iterated as they stand, which contracts; exact.
    """
    with mpmath.workdps(25):
        half = sites // 2
        numbers = [mpf(2 * j - half + 1) / 2 for j in range(half)]
        roots = [mp.tan(mp.pi * q / sites) / 2 for q in numbers]
        for _ in range(2000):
            new = [
                mp.tan((mp.pi * q + mp.fsum(mp.atan(a - b) for b in roots)) / sites) / 2
                for q, a in zip(numbers, roots, strict=True)
            ]
            change = max(abs(a - b) for a, b in zip(new, roots, strict=True))
            roots = new
            if change < mpf(10) ** -16:
                break
        return float(mpf(sites) / 4 - mp.fsum(1 / (a * a + mpf(1) / 4) for a in roots) / 2)


# 4x4 periodic square: widely tabulated (paper, from memory), redone elsewhere.
SQUARE_16_ENERGY, SQUARE_16_GAP = -11.228483208, 0.578598336

# Spin-1 chain: Golinelli, Jolicoeur and Lacaze, Phys. Rev. B 50, 3037 (1994) (paper).
HALDANE_GAP, HALDANE_ENERGY = 0.41049, -1.401485

# Alternating chain (J, alpha J): Barnes, Riera and Tennant, Phys. Rev. B 59, 11384 (1999)
# (paper), redone elsewhere on 12 sites. Coefficients of alpha^0, alpha^1, ...
ALTERNATING_GAP = [F(1), F(-1, 2), F(-3, 8), F(1, 32), F(-5, 384)]
ALTERNATING_ENERGY = [F(-3, 8), F(0), F(-3, 64), F(-3, 256), F(-13, 4096)]

# --- Constants (CODATA 2022), as printed in the project's reference sheet --------------------
BOLTZMANN_MEV = 0.08617333262  # meV/K
BOLTZMANN_WAVENUMBER = 0.6950348005  # cm-1/K
KELVIN_PER_MEV = 11.60451812
KELVIN_PER_WAVENUMBER = 1.438776878
KELVIN_PER_GHZ = 0.0479924307
MU_B_OVER_K = 0.6717138147  # K/T
GAS_CONSTANT = 8.314462618  # J/(mol K)
GAS_CONSTANT_LN2 = 5.763146322
AVOGADRO_MU_B_EMU = 5584.94  # emu/mol
CURIE_HALF_EMU = 0.3751480951  # emu K/mol, spin 1/2 with g = 2
CURIE_HALF_SI = 4.71425e-6  # m3 K/mol

# Copper(II) acetate monohydrate, dimer: singlet-triplet gap 286 to 296 cm-1, susceptibility
# hump near 255 K (Bleaney and Bowers 1952; later measurements). Paper, from memory.
COPPER_ACETATE_GAPS = (286.0, 296.0)  # cm-1
COPPER_ACETATE_HUMP = 255.0  # K
