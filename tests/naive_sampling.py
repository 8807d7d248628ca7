"""Slow, obvious twins for sampled levels: they import nothing from the package.

A spectrum is a list of sectors (twice_m, multiplicity, energies): ``multiplicity`` equal blocks,
both signs of M among them, with these eigenvalues. A sampled one is a dict of arrays over its
levels: energy, raw, unit (−1 exact), sector, twice_m.
"""

from __future__ import annotations

import numpy as np
from scipy import stats


def sampled_levels(sectors, vectors, rng, full_below=0, exact_low=0):
    """Levels as random vectors see them when Lanczos runs to the end: |⟨r|n⟩|² of complex
    Gaussian vectors on the exact eigenvalues, the lowest ``exact_low`` of each sector exact."""
    columns = {name: [] for name in ("energy", "raw", "unit", "sector", "twice_m")}
    unit_sector: list[int] = []

    def add(energy, raw, unit, sector, twice_m):
        n = len(energy)
        for name, value in (("unit", unit), ("sector", sector), ("twice_m", twice_m)):
            columns[name].append(np.full(n, value))
        columns["energy"].append(energy)
        columns["raw"].append(raw)

    for s, (twice_m, multiplicity, energies) in enumerate(sectors):
        energies = np.sort(energies)
        exact = len(energies) if len(energies) <= full_below else exact_low
        add(energies[:exact], np.full(exact, float(multiplicity)), -1, s, twice_m)
        rest = energies[exact:]
        if not len(rest):
            continue
        for _ in range(vectors):
            share = rng.exponential(size=len(rest))
            share *= multiplicity * len(rest) / share.sum() / vectors
            add(rest, share, len(unit_sector), s, twice_m)
            unit_sector.append(s)
    levels = {name: np.concatenate(parts) for name, parts in columns.items()}
    return levels, np.array(unit_sector, dtype=np.int64)


def exact_moments(sectors, twice_m, center, scale, highest):
    """Traces of ((E − center)/scale)^k over all states with this |M|, k = 0 … highest."""
    return np.array(
        [
            sum(g * np.sum(((e - center) / scale) ** k) for m, g, e in sectors if m == twice_m)
            for k in range(highest + 1)
        ]
    )


def calibrated(energy, raw, sampled, moments, center, scale, degree):
    """raw·(1 + q(x)) for sampled levels, q of the given degree from its normal equations."""
    x = (energy - center) / scale
    powers = np.array([x**k for k in range(degree + 1)])
    missing = moments[: degree + 1] - powers @ raw
    on = powers[:, sampled]
    matrix = (on * raw[sampled]) @ on.T
    weight = raw.copy()
    weight[sampled] *= 1 + np.linalg.solve(matrix, missing) @ on
    return weight


def curves_of(energy, weight, twice_m, t, h):
    """U, F, S, C, ⟨M⟩ and its variance from a plain sum over states."""
    states = []
    for e, w, m in zip(energy, weight, twice_m, strict=True):
        for sign in (1,) if m == 0 else (-1, 1):
            states.append((e - sign * h * m / 2, w if m == 0 else w / 2, sign * m / 2))
    e, w, m = np.array(states).T
    base = e.min()
    p = w * np.exp(-(e - base) / t)
    z = p.sum()
    p /= z
    u = p @ e
    f = base - t * np.log(z)
    mean = p @ m
    return np.array(
        [u, f, (u - f) / t, p @ (e - u) ** 2 / t**2, mean, p @ (m - mean) ** 2]
    )  # fmt: skip


def jackknife(levels, unit_sector, moments, center, scale, degrees, t, h):
    """(6,) errors of ``curves_of`` at one point: every replicate is a table computed anew.

    ``moments`` and ``degrees`` map twice_m to exact traces and the degree of the calibration.
    """
    energy, unit, twice_m = levels["energy"], levels["unit"], levels["twice_m"]

    def curve(raw):
        weight = raw.copy()
        for m, exact in moments.items():
            at = twice_m == m
            if degrees[m] >= 0:
                weight[at] = calibrated(
                    energy[at], raw[at], unit[at] >= 0, exact, center, scale, degrees[m]
                )
        return curves_of(energy, weight, twice_m, t, h)

    shares, freedom = [], []
    for s in sorted(set(unit_sector.tolist())):
        units = np.flatnonzero(unit_sector == s)
        r = len(units)
        replicates = []
        for u in units:
            raw = levels["raw"].copy()
            for v in units:
                raw[unit == v] *= 0 if v == u else r / (r - 1)
            replicates.append(curve(raw))
        deviation = np.array(replicates) - np.mean(replicates, axis=0)
        shares.append((r - 1) / r * np.sum(deviation**2, axis=0))
        freedom.append(r - 1)
    v = np.array(shares)
    total = np.sum(v, axis=0)
    errors = np.zeros(len(total))
    for k in np.flatnonzero(total > 0):
        nu = total[k] ** 2 / np.sum(v[:, k] ** 2 / (np.array(freedom) + 1)) - 1
        errors[k] = np.sqrt(total[k]) * stats.t.ppf(stats.norm.cdf(1), nu)
    return errors


def invented_sectors(rng, sizes, width=2.0):
    """Sectors with random energies, so that nothing in them is symmetric or degenerate.

    ``sizes`` lists (twice_m, multiplicity, dimension)."""
    return [(m, g, rng.normal(scale=width, size=n)) for m, g, n in sizes]


def plain_lanczos(multiply, first, partners, steps):
    """Lanczos 1950 with the whole basis kept and orthogonalised twice: alpha (m,), beta (m,),
    overlaps of the partners with each basis vector (m, F); m ≤ steps, fewer where the space is
    used up. ``multiply`` is H on a vector."""
    basis = [first / np.linalg.norm(first)]
    alpha, beta, dots = [], [], []
    for _ in range(steps):
        v = basis[-1]
        dots.append([np.vdot(p, v) for p in partners])
        w = multiply(v)
        alpha.append(np.vdot(v, w).real)
        for _ in range(2):
            known = np.array(basis)
            w = w - known.T @ (known.conj() @ w)
        beta.append(np.linalg.norm(w))
        if beta[-1] < 1e-10:
            break
        basis.append(w / beta[-1])
    return np.array(alpha), np.array(beta), np.array(dots).reshape(len(alpha), len(partners))


def several_lanczos(diagonal, vectors, steps, rng):
    """Lanczos without any orthogonalisation for ``vectors`` random complex vectors of a diagonal
    matrix: the vectors (R, d), alpha (m, R), beta (m, R), and dots (m, R−1, R), the overlap
    of vector k+f+1 (modulo R) with the basis of vector k at [j, f, k]."""
    d = len(diagonal)
    r = rng.standard_normal((vectors, d)) + 1j * rng.standard_normal((vectors, d))
    r /= np.linalg.norm(r, axis=1)[:, None]
    v, u, b = r.copy(), np.zeros_like(r), np.zeros(vectors)
    alpha, beta = np.zeros((steps, vectors)), np.zeros((steps, vectors))
    dots = np.zeros((steps, vectors - 1, vectors), dtype=complex)
    for j in range(steps):
        overlap = r.conj() @ v.T
        for f in range(vectors - 1):
            dots[j, f] = [overlap[(k + f + 1) % vectors, k] for k in range(vectors)]
        w = diagonal * v - b[:, None] * u
        alpha[j] = np.sum(v.conj() * w, axis=1).real
        w -= alpha[j][:, None] * v
        b = np.linalg.norm(w, axis=1)
        beta[j] = b
        u, v = v, w / np.where(b > 0, b, 1.0)[:, None]
    return r, alpha, beta, dots
