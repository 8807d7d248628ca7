"""Susceptibility tensors and powders against closed forms from outside, k_B = μ_B = 1."""

from __future__ import annotations

from math import comb

import mpmath
import numpy as np
import pytest
from scipy.integrate import quad

import thermo
from tests.strategies import Cluster, complete, ring
from tests.test_moments import with_g

T = np.array([0.2, 0.7, 1.5, 6.0])


def curves(cluster, g, temperature, field=0.0, axis="z"):
    """Curves of the whole cluster as {name: (nT, nB)}."""
    model = thermo.read_model(with_g(cluster, g))
    found = thermo.directional_curves(model, temperature, field, axis, "reduced")
    return {str(k): v.values * len(cluster.spins) for k, v in found.data_vars.items()}


def alone(spin, d=0.0, e=0.0):
    return Cluster((spin,), (), {"D": d, "E": e}, ((0, "D", "axial"), (0, "E", "rhombic")))


@pytest.mark.parametrize("spin", [0.5, 1.0, 1.5, 2.0, 2.5])
def test_curie_constants(spin):
    """χT = g² S(S+1)/3 (Curie's law, exact), each direction its own g."""
    found = curves(alone(spin), [np.diag([1.9, 2.0, 2.2])], T)
    for g, name in ((1.9, "xx"), (2.0, "yy"), (2.2, "zz")):
        chi = found[f"susceptibility_{name}"][:, 0]
        assert chi * T == pytest.approx(np.full(4, g * g * spin * (spin + 1) / 3), rel=1e-12)


def test_curie_constant_in_emu():
    """0.3751480951 emu K/mol for spin ½ with g = 2 (from CODATA 2022 constants)."""
    mapping = with_g(alone(0.5), [np.diag([2.0, 2.0, 2.0])]) | {"energy_unit": "K"}
    found = thermo.directional_curves(thermo.read_model(mapping), [4.0], 0.0, "x", "molar-cgs")
    assert 4 * found["susceptibility_xx"].values[0, 0] == pytest.approx(0.3751480951, rel=1e-9)


def test_spin_one_with_axial_and_rhombic_terms():
    """Textbook (Carlin 1986; Kahn 1993; from memory): levels 0, D − E, D + E, and
    χ_zz = g² (p₋ − p₊)/E, χ_xx = 2g² (p₀ − p₊)/(D + E), χ_yy = 2g² (p₀ − p₋)/(D − E)."""
    d, e, g = 1.3, 0.4, (2.1, 2.2, 2.3)
    found = curves(alone(1.0, d, e), [np.diag(g)], T)
    levels = np.array([0, d - e, d + e])
    p = np.exp(-levels / T[:, None])
    p /= p.sum(axis=1, keepdims=True)
    exact = {
        "zz": g[2] ** 2 * (p[:, 1] - p[:, 2]) / e,
        "xx": 2 * g[0] ** 2 * (p[:, 0] - p[:, 2]) / (d + e),
        "yy": 2 * g[1] ** 2 * (p[:, 0] - p[:, 1]) / (d - e),
    }
    for name, chi in exact.items():
        assert found[f"susceptibility_{name}"][:, 0] == pytest.approx(chi, rel=1e-11)
    # Schottky's specific heat of three levels.
    heat = (p @ levels**2 - (p @ levels) ** 2) / T**2
    assert found["specific_heat"][:, 0] == pytest.approx(heat, rel=1e-10)


@pytest.mark.parametrize("d", [2.0, -2.0, 1e-7])
def test_spin_one_with_an_axial_term(d):
    """Textbook (Carlin 1986; Kahn 1993; from memory): χ∥ = (2g²/T) e^{−D/T}/(1 + 2e^{−D/T}),
    χ⊥ = (2g²/D)(1 − e^{−D/T})/(1 + 2e^{−D/T}); for D → 0 both are 2g²/3T."""
    found = curves(alone(1.0, d), [np.diag([2.0, 2.0, 2.5])], T)
    w = np.exp(-d / T)
    parallel = 2 * 2.5**2 / T * w / (1 + 2 * w)
    across = 2 * 4.0 / d * -np.expm1(-d / T) / (1 + 2 * w)
    assert found["susceptibility_zz"][:, 0] == pytest.approx(parallel, rel=1e-10)
    assert found["susceptibility_xx"][:, 0] == pytest.approx(across, rel=1e-10)
    assert found["susceptibility_yy"][:, 0] == pytest.approx(across, rel=1e-10)
    powder = curves(alone(1.0, d), [np.diag([2.0, 2.0, 2.5])], T, axis="powder")
    mean = (parallel + 2 * across) / 3
    assert powder["susceptibility"][:, 0] == pytest.approx(mean, rel=1e-10)


def test_powder_of_a_tensor_g_paramagnet():
    """Spin ½ with axial g: along n the doublet splits by g(n) b, g² = g∥²u² + g⊥²(1 − u²), so
    M = (g/2) tanh(g b/2T); the average over u = cos θ by adaptive quadrature."""
    across, along, b = 1.2, 6.0, 0.9

    def g(u):
        return np.hypot(along * u, across * np.sqrt(1 - u * u))

    found = curves(alone(0.5), [np.diag([across, across, along])], T, [0.0, b], "powder")
    curie = (along**2 + 2 * across**2) / 12
    assert found["susceptibility"][:, 0] * T == pytest.approx(np.full(4, curie), rel=1e-12)
    for k, t in enumerate(T):

        def moment(u, t=t):
            return g(u) / 2 * np.tanh(g(u) * b / (2 * t))

        def heat(u, t=t):
            x = g(u) * b / (2 * t)
            return (x / np.cosh(x)) ** 2

        exact = quad(moment, 0, 1, epsabs=1e-13)[0]
        assert found["magnetization"][k, 1] == pytest.approx(exact, rel=1e-6)
        assert found["specific_heat"][k, 1] == pytest.approx(
            quad(heat, 0, 1, epsabs=1e-13)[0], abs=1e-6
        )


@pytest.mark.parametrize("spin", [0.5, 2.5])
def test_brillouin(spin):
    """A free spin along any axis: M = g Σ m e^{g m b/T}/Z (Brillouin 1927), C likewise."""
    b, axis = 0.8, [1.0, -2.0, 0.5]
    g = [2.0 * np.eye(3), 3.0 * np.eye(3)]
    found = curves(Cluster((spin, spin), (), {}, ()), g, T, b, axis)
    m = np.arange(-spin, spin + 1)
    moment = np.zeros(len(T))
    for factor in (2.0, 3.0):
        p = np.exp(factor * b * m / T[:, None])
        moment += factor * (p @ m) / p.sum(axis=1)
    assert found["magnetization"][:, 0] == pytest.approx(moment, rel=1e-11)
    direction = np.array(axis) / np.linalg.norm(axis)
    for a, letter in enumerate("xyz"):
        assert found[f"magnetization_{letter}"][:, 0] == pytest.approx(moment * direction[a])


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_transverse_susceptibility_of_the_ising_ring(sign):
    """A spin between neighbours l, r feels λ = J(S_l + S_r): χ⊥ = tanh(J/2T)/2J where they agree,
    1/4T where not, and c₂ = ⟨σ_l σ_r⟩ = (t² + t^{N−2})/(1 + t^N), t = −tanh(J/4T). For a long
    ring this is Fisher's (1963, from memory) ½J⁻¹ [tanh K + K sech² K], K = J/4T."""
    j, n = sign, 10
    found = curves(ring(n, form="ising", value=j), [np.eye(3)] * n, T)
    t = -np.tanh(j / (4 * T))
    c2 = (t**2 + t ** (n - 2)) / (1 + t**n)
    chi = (1 + c2) / 2 * np.tanh(j / (2 * T)) / (2 * j) + (1 - c2) / 2 / (4 * T)
    for name in ("xx", "yy"):
        assert found[f"susceptibility_{name}"][:, 0] / n == pytest.approx(chi, rel=1e-10)
    k = j / (4 * T[-1])
    fisher = (np.tanh(k) + k / np.cosh(k) ** 2) / (2 * j)
    assert chi[-1] == pytest.approx(fisher, rel=1e-9)
    # Along the Ising axis: χ∥ = (1/4T) (1 + t)/(1 − t) · (1 − t^N)/(1 + t^N) (Ising 1925).
    along = (1 + t) / (1 - t) * (1 - t**n) / (1 + t**n) / (4 * T)
    assert found["susceptibility_zz"][:, 0] / n == pytest.approx(along, rel=1e-9)


def transverse_ising(n, j, b, t):
    """ln Z of J Σ SᶻSᶻ − b Σ Sˣ on a ring of even n by free fermions (Lieb, Schultz and Mattis
    1961; Pfeuty 1970; from memory): ε_k = 2√(K² + h² − 2Kh cos k), K = |J|/4, h = b/2, with
    the signs ε₀ = 2(h − K), ε_π = 2(h + K)."""
    coupling, h = abs(j) / mpmath.mpf(4), b / 2
    products = []
    for odd in (1, 0):
        cosh = sinh = mpmath.mpf(1)
        for m in range(n):
            k = mpmath.pi * (2 * m + odd) / n
            energy = 2 * mpmath.sqrt(coupling**2 + h**2 - 2 * coupling * h * mpmath.cos(k))
            if not odd and m == 0:
                energy = 2 * (h - coupling)
            cosh *= 2 * mpmath.cosh(energy / (2 * t))
            sinh *= 2 * mpmath.sinh(energy / (2 * t))
        products.append((cosh, sinh))
    (a, b_), (c, d) = products
    return mpmath.log((a + b_ + c - d) / 2)


@pytest.mark.parametrize("j", [1.0, -1.0])
def test_transverse_field_ising_ring(j):
    """Pfeuty's chain as a ring of 8 with the field across: M, χ, C and F by derivatives of ln Z."""
    n, fields = 8, [0.2, 0.5, 1.1]
    found = curves(ring(n, form="ising", value=j), [np.eye(3)] * n, T, fields, "x")
    with mpmath.workdps(40):
        for i, t in enumerate(map(mpmath.mpf, map(float, T))):
            for k, b in enumerate(map(mpmath.mpf, map(float, fields))):
                free = -t * transverse_ising(n, j, b, t)
                moment = t * mpmath.diff(lambda x, t=t: transverse_ising(n, j, x, t), b)
                chi = t * mpmath.diff(lambda x, t=t: transverse_ising(n, j, x, t), b, 2)
                heat = t * mpmath.diff(lambda x, b=b: x * transverse_ising(n, j, b, x), t, 2)
                assert found["free_energy"][i, k] == pytest.approx(float(free), rel=1e-12)
                assert found["magnetization"][i, k] == pytest.approx(float(moment), rel=1e-10)
                assert found["susceptibility"][i, k] == pytest.approx(float(chi), rel=1e-9)
                assert found["specific_heat"][i, k] == pytest.approx(float(heat), rel=1e-9)


def multiplets(spin, count):
    """How often each total spin occurs among ``count`` spins: differences of the numbers of
    states with each M."""
    states = np.ones(1, dtype=int)
    for _ in range(count):
        states = np.convolve(states, np.ones(round(2 * spin) + 1, dtype=int))
    half = states[len(states) // 2 :]
    lowest = 0.0 if len(states) % 2 else 0.5
    drops = half - np.append(half[1:], 0)
    return {lowest + k: int(c) for k, c in enumerate(drops) if c}


def test_complete_graph_of_high_spins():
    """E = (J/2)[S(S+1) − n s(s+1)], χ_a T = g_a² Σ n_S S(S+1)(2S+1)e^{−E/T}/3Z (Kambe 1950): the
    total-spin formulas hold for a uniform tensor g, which takes the general way."""
    spin, n, g = 2.5, 3, (1.9, 2.0, 2.4)
    found = curves(complete(n, spin), [np.diag(g)] * n, T)
    numbers = multiplets(spin, n)
    total = np.array(list(numbers))
    weight = np.array(list(numbers.values())) * (2 * total + 1)
    assert weight.sum() == 6**n
    energy = (total * (total + 1) - n * spin * (spin + 1)) / 2
    p = weight * np.exp(-(energy - energy.min()) / T[:, None])
    p /= p.sum(axis=1, keepdims=True)
    square = p @ (total * (total + 1)) / 3
    for factor, name in zip(g, ("xx", "yy", "zz"), strict=True):
        chi = found[f"susceptibility_{name}"][:, 0]
        assert chi * T == pytest.approx(factor**2 * square, rel=1e-9)
    assert found["susceptibility_xy"] == pytest.approx(np.zeros((4, 1)), abs=1e-10)


def test_multiplets_of_spins_a_half():
    """C(n, n/2 − S) − C(n, n/2 − S − 1) for spins ½, and every pair of spins 1 once."""
    assert multiplets(0.5, 4) == {0.0: 2, 1.0: 3, 2.0: 1}
    assert multiplets(0.5, 5)[0.5] == comb(5, 2) - comb(5, 1)
    assert multiplets(1.0, 2) == {0.0: 1, 1.0: 1, 2.0: 1}
