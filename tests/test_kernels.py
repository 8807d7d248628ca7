"""Kernels against slow twins written here from the definitions, jitted and not."""

from __future__ import annotations

import itertools
import os
import subprocess
import sys

import numpy as np
import pytest

from tests import naive
from thermo.hilbert import encoding as enc
from thermo.hilbert import operators
from thermo.hilbert.jit import cache_folder
from thermo.hilbert.orbits import find_links, find_orbits

MIXED = np.array([1, 2, 1, 3, 5, 1], dtype=np.int64)  # 2S of ½, 1, ½, 3⁄2, 5⁄2, ½


def pack(code: enc.Encoding, digits) -> int:
    return int(sum(int(d) << int(s) for d, s in zip(digits, code.shift, strict=True)))


def unpack(code: enc.Encoding, c: int) -> np.ndarray:
    return (c >> code.shift) & code.mask


def all_digits(twice_spin) -> list[tuple[int, ...]]:
    return list(itertools.product(*(range(t + 1) for t in twice_spin)))


@pytest.mark.parametrize("modulus", [0, 1, 2])
@pytest.mark.parametrize("twice_m", [0, 1, -1, 3])
def test_half_lists_join_to_every_configuration_once(modulus: int, twice_m: int) -> None:
    code = enc.encode(MIXED)
    target = twice_m % (2 * modulus) if modulus else twice_m
    halves = enc.half_lists(code, MIXED, target, modulus)
    joined = [
        int(h + low)
        for h, c in zip(halves.high, halves.partner, strict=True)
        if c >= 0
        for low in halves.low[halves.low_start[c] : halves.low_start[c + 1]]
    ]

    def wanted(digits) -> bool:
        total = int(np.sum(2 * np.array(digits) - MIXED))
        return total == target if modulus == 0 else (total - target) % (2 * modulus) == 0

    expected = sorted(pack(code, d) for d in all_digits(MIXED) if wanted(d))
    assert joined == expected  # ascending, too


@pytest.mark.parametrize("twice_spin", [[1] * 20, [2] * 9, [5] * 8, [1, 2, 1, 2, 3, 3]])
def test_element_tables_permute_and_reverse(twice_spin: list[int]) -> None:
    twice = np.array(twice_spin)
    code = enc.encode(twice)
    rng = np.random.default_rng(3)
    n = len(twice)
    p = np.arange(n)
    for value in np.unique(twice):  # permute equal spins only
        where = np.flatnonzero(twice == value)
        p[where] = rng.permutation(where)
    tables = enc.element_tables(code, np.array([p, p]), np.array([False, True]))
    for _ in range(50):
        digits = np.array([rng.integers(t + 1) for t in twice])
        c = pack(code, digits)
        assert np.array_equal(unpack(code, c), digits)
        for g, flipped in enumerate((digits, twice - digits)):
            moved = np.empty(n, dtype=int)
            moved[p] = flipped
            image = sum(
                int(tables[g, k, (c >> int(code.chunk_shift[k])) & int(code.chunk_mask[k])])
                for k in range(len(code.chunk_shift))
            )
            assert image == pack(code, moved)


def test_too_wide_fields_never_share_a_chunk() -> None:
    code = enc.encode(np.array([5] * 20))  # three bits each: 60 bits
    assert code.shift[-1] + 3 == 60
    assert (code.chunk_mask < 256).all()


def ring_elements(n: int):
    shifts = np.array([[(i + t) % n for i in range(n)] for t in range(n)])
    return np.concatenate([shifts, shifts]), np.array([False] * n + [True] * n)


def test_orbits_and_links_against_brute_force() -> None:
    n = 8
    twice = np.ones(n, dtype=np.int64)
    code = enc.encode(twice)
    permutations, flags = ring_elements(n)
    tables = enc.element_tables(code, permutations, flags)
    halves = enc.half_lists(code, twice, 0, 0)

    def images(digits) -> list[int]:
        found = []
        for p, flip in zip(permutations, flags, strict=True):
            moved = [0] * n
            for i in range(n):
                moved[p[i]] = 1 - digits[i] if flip else digits[i]
            found.append(pack(code, moved))
        return found

    everything = {pack(code, d): images(d) for d in all_digits(twice) if sum(d) == n // 2}
    expected = sorted({min(v) for v in everything.values()})
    orbits = find_orbits(code, halves, tables, len(expected))
    assert orbits.representatives.tolist() == expected
    for r, c in enumerate(expected):
        fixing = [g for g, image in enumerate(everything[c]) if image == c and g > 0]
        assert orbits.fixing[orbits.start[r] : orbits.start[r + 1]].tolist() == fixing
        assert orbits.stabiliser[r] == len(fixing) + 1
    pair = {tuple(sorted((i, (i + 1) % n))): np.eye(3)[None] for i in range(n)}
    moves = operators.move_tables(code, pair, {}, 1, 0)
    links = find_links(code, orbits, tables, moves)
    for r, c in enumerate(expected):
        digits = unpack(code, c)
        for m in range(len(moves.site_i)):
            i, j = moves.site_i[m], moves.site_j[m]
            after = digits.copy()
            after[i] += moves.step_i[m]
            after[j] += moves.step_j[m]
            if after.min() < 0 or after.max() > 1:
                assert links.targets[r, m] == -1
                continue
            target = images(after)
            assert orbits.representatives[links.targets[r, m]] == min(target)
            assert target[links.elements[r, m]] == min(target)


@pytest.mark.parametrize("twice", [1, 2, 3, 5])
def test_spin_matrices_obey_the_algebra(twice: int) -> None:
    x, y, z = operators.spin_matrices(twice)
    assert np.abs(x @ y - y @ x - 1j * z).max() < 1e-14 * (1 + twice**2)
    s = twice / 2
    casimir = x @ x + y @ y + z @ z
    assert np.abs(casimir - s * (s + 1) * np.eye(twice + 1)).max() < 1e-13


@pytest.mark.parametrize("seed", range(6))
def test_moves_rebuild_the_dense_operator(seed: int) -> None:
    rng = np.random.default_rng(seed)
    twice = rng.permutation([1, 2, 3])
    code = enc.encode(twice)
    pair = {(0, 1): rng.standard_normal((1, 3, 3)), (1, 2): rng.standard_normal((1, 3, 3))}
    quadrupole = rng.standard_normal((3, 3))
    ion = {2: (quadrupole + quadrupole.T)[None]}
    moves = operators.move_tables(code, pair, ion, 1, 1)
    states = all_digits(twice)
    place = {s: k for k, s in enumerate(states)}
    dense = np.zeros((len(states), len(states)), dtype=complex)

    def entry(table, i, j, digits):
        return digits[i] if i == j else digits[i] * code.dimension[j] + digits[j]

    for s in states:
        for k in range(len(moves.diagonal_i)):
            i, j = moves.diagonal_i[k], moves.diagonal_j[k]
            offset = moves.diagonal_offset[k]
            dense[place[s], place[s]] += moves.diagonals[0, offset + entry(None, i, j, s)]
        for m in range(len(moves.site_i)):
            i, j = moves.site_i[m], moves.site_j[m]
            after = list(s)
            after[i] += int(moves.step_i[m])
            after[j] += int(moves.step_j[m])
            if tuple(after) in place:
                amplitude = moves.amplitudes[0, moves.offset[m] + entry(None, i, j, s)]
                dense[place[tuple(after)], place[s]] += amplitude
    spins = [t / 2 for t in twice]
    expected = naive.hamiltonian(
        spins,
        [(i, j, a[0]) for (i, j), a in pair.items()],
        [(i, d[0]) for i, d in ion.items()],
    )
    assert np.abs(np.linalg.eigvalsh(dense) - np.linalg.eigvalsh(expected)).max() < 1e-12
    # Same matrix once the twin's order (m falling, first site slowest) is undone.
    assert np.abs(dense - dense.conj().T).max() < 1e-14


def test_kernels_give_the_same_without_the_compiler() -> None:
    code = (
        "import numpy as np, thermo\n"
        "mapping = {'format': 1, 'energy_unit': '1', 'bond_term': '+J S.S',\n"
        " 'couplings': {'J': 1.0, 'D': 0.3, 'A': 0.2},\n"
        " 'site': [{'spin': s} for s in (0.5, 1, 0.5, 1)],\n"
        " 'bond': [{'sites': [i, (i + 1) % 4], 'coupling': 'J'} for i in range(4)]\n"
        " + [{'sites': [i, (i + 1) % 4], 'coupling': 'D', 'form': 'antisymmetric',\n"
        "    'vector': [0, 0, 1]} for i in range(4)],\n"
        " 'ion': [{'sites': [1, 3], 'coupling': 'A', 'form': 'axial'}]}\n"
        "for change in ({}, {'D': 0.0, 'A': 0.0}):\n"
        "    model = thermo.read_model(mapping).with_couplings(change)\n"
        "    levels = thermo.solve(model, method='full')\n"
        "    print(' '.join(repr(float(e)) for e in levels.energy.values))\n"
    )

    def run(disable: str) -> np.ndarray:
        done = subprocess.run(
            [sys.executable, "-c", code],
            env={**os.environ, "NUMBA_DISABLE_JIT": disable},
            capture_output=True,
            text=True,
            check=True,
        )
        return np.array([float(x) for x in done.stdout.split()])

    compiled, plain = run("0"), run("1")
    assert len(compiled) == len(plain) > 10
    assert np.abs(compiled - plain).max() < 1e-12


def test_cache_survives_without_home_or_write_access(monkeypatch, tmp_path) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    first = cache_folder()
    assert first is not None
    assert first.is_relative_to(tmp_path / "cache")
    blocked = tmp_path / "file"
    blocked.write_text("")
    monkeypatch.setenv("XDG_CACHE_HOME", str(blocked / "below a file"))
    monkeypatch.setenv("TMPDIR", str(tmp_path))
    monkeypatch.setattr("tempfile.tempdir", None)
    second = cache_folder()
    assert second is not None
    assert second.is_relative_to(tmp_path)
    monkeypatch.setenv("TMPDIR", str(blocked))
    monkeypatch.setattr("tempfile.gettempdir", lambda: str(blocked))
    assert cache_folder() is None
