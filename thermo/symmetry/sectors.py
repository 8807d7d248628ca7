"""Sectors: blocks of H labelled by magnetic number, site characters and spin reversal.

The symmetry elements of a sector are site permutations, each optionally followed by the
reversal |m⟩ → |−m⟩ of every site, so one loop over elements serves all cases. Sector
dimensions follow from the number of configurations that each element fixes (Burnside's
lemma with characters); no configuration is listed for them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.errors import SpectrumError
from thermo.model.spin_model import SpinModel
from thermo.symmetry.abelian import AbelianGroup, choose_abelian, cycles
from thermo.symmetry.automorphisms import Permutation, automorphism_group, colour_matrix
from thermo.symmetry.interaction import Conserved, Interaction, conserved, interaction

# Resolving S by a shift Λ·S(S+1) costs rounding of that size: beyond this S of the cluster the
# sectors of M, which need no shift, are the accurate way.
LARGEST_SHIFTED_SPIN = 40


@dataclass(frozen=True, eq=False)
class Sector:
    """One block to be diagonalised.

    ``twice_m``: 2M (or its residue class), ``character`` of the site group A, ``parity`` of
    the reversal (+1, −1, or 0 where it is not used). ``star`` blocks have this spectrum at
    this M; ``mirrored`` says that −M has it too. ``conjugating`` is the permutation that
    makes the block real, None for a complex block. ``phases`` are the exponents e(g) of the
    sector's character over the elements of its ``SymmetryElements``.
    """

    twice_m: int
    character: int
    parity: int
    dimension: int
    star: int
    mirrored: bool
    conjugating: Permutation | None
    phases: NDArray[np.int64]

    @property
    def real(self) -> bool:
        """Whether the block is real symmetric in a suitable basis."""
        return self.conjugating is not None

    @property
    def multiplicity(self) -> int:
        """Number of blocks of the whole Hilbert space that share this spectrum."""
        return self.star * (2 if self.mirrored else 1)


@dataclass(frozen=True, eq=False)
class SymmetryElements:
    """The elements used at one M: permutations (G, N) and reversal flags (G,); identity first."""

    permutations: NDArray[np.int64]
    reversed: NDArray[np.bool_]
    modulus: int

    @property
    def order(self) -> int:
        """Number of elements G."""
        return len(self.permutations)


@dataclass(frozen=True, eq=False)
class MagneticSector:
    """All sectors of one M (or one class of M), which share their orbits and elements.

    ``orbits`` is the number of orbits of configurations, ``configurations`` their total.
    """

    twice_m: int
    configurations: int
    orbits: int
    elements: SymmetryElements
    sectors: tuple[Sector, ...]


@dataclass(frozen=True, eq=False)
class SymmetryPlan:
    """Everything symmetry says about a model: what is conserved, the groups, the sectors."""

    terms: Interaction
    conserved: Conserved
    group_order: int
    abelian: AbelianGroup
    magnetic: tuple[MagneticSector, ...]
    resolved: str

    @property
    def sectors(self) -> list[Sector]:
        """Every block to be solved."""
        return [s for m in self.magnetic for s in m.sectors]


def _fixed_configurations(
    permutation: Permutation, reverse: bool, twice_spin: NDArray[np.int64]
) -> dict[int, int]:
    """How many configurations of each 2M an element leaves as they are."""
    counts = np.ones(1, dtype=object)
    lowest = 0
    for cycle in cycles(permutation):
        twice_s = int(twice_spin[cycle[0]])
        length = len(cycle)
        if reverse:
            # Once round an odd cycle m turns into −m; an even one alternates and sums to zero.
            fixed = twice_s + 1 if length % 2 == 0 else (twice_s + 1) % 2
            counts = counts * fixed
        else:
            # 2M of a uniform cycle runs from −ℓ2S to ℓ2S in steps of 2ℓ.
            single = np.zeros(length * twice_s + 1, dtype=object)
            single[::length] = 1
            counts = np.convolve(counts, single)
            lowest -= length * twice_s
    return {lowest + 2 * k: int(c) for k, c in enumerate(counts) if c}


def _by_class(counts: dict[int, int], modulus: int) -> dict[int, int]:
    """Counts per conserved class of 2M: 2M itself, or its residue for M modulo ``modulus``."""
    if modulus == 0:
        return counts
    merged: dict[int, int] = {}
    for twice_m, count in counts.items():
        key = twice_m % (2 * modulus)
        merged[key] = merged.get(key, 0) + count
    return merged


class _FixedCounts:
    """Fixed-configuration counts, computed once per cycle type."""

    def __init__(self, twice_spin: NDArray[np.int64], modulus: int):
        self._twice_spin = twice_spin
        self._modulus = modulus
        self._known: dict[tuple[object, ...], dict[int, int]] = {}

    def __call__(self, permutation: Permutation, reverse: bool) -> dict[int, int]:
        lengths = sorted((len(c), int(self._twice_spin[c[0]])) for c in cycles(permutation))
        key = (reverse, *lengths)
        if key not in self._known:
            fixed = _fixed_configurations(permutation, reverse, self._twice_spin)
            self._known[key] = _by_class(fixed, self._modulus)
        return self._known[key]


def plan_symmetry(
    model: SpinModel,
    generic: bool = False,
    use_total_spin: bool = True,
    use_magnetization: bool = True,
    use_permutations: bool = True,
) -> SymmetryPlan:
    """Find what a model conserves, its site permutations, and the blocks to solve.

    ``generic`` asks for symmetries that hold for every value of the couplings. The three
    switches turn single symmetries off, for tests that compare the paths.
    """
    terms = interaction(model, generic)
    kept = conserved(terms)
    if not use_magnetization:
        kept = Conserved(1, False, False, kept.real)
    if not use_total_spin or terms.twice_spin.sum() > 2 * LARGEST_SHIFTED_SPIN:
        kept = Conserved(kept.modulus, False, kept.reversal, kept.real)
    if use_permutations:
        group = automorphism_group(colour_matrix(terms))
        order = group.order
        abelian = choose_abelian(group, model.translations, kept.real)
    else:
        order = 1
        identity = np.arange(terms.n_sites, dtype=np.int64)[None]
        abelian = AbelianGroup(identity, np.zeros((1, 1), dtype=np.int64), 1, ())
        kept = Conserved(kept.modulus, kept.total_spin, False, kept.real)
    fixed = _FixedCounts(terms.twice_spin, kept.modulus)
    classes = sorted(fixed(np.arange(terms.n_sites), False))
    magnetic = []
    for twice_m in classes:
        if kept.total_spin and twice_m not in (0, 1):
            continue
        opposite = -twice_m if kept.modulus == 0 else -twice_m % (2 * kept.modulus)
        if opposite != twice_m and twice_m > opposite and kept.modulus:
            continue  # solved as the class of −M
        if kept.modulus == 0 and twice_m < 0:
            continue
        mirrored = opposite != twice_m and not kept.total_spin
        reverse = kept.reversal and opposite == twice_m
        magnetic.append(_magnetic_sector(twice_m, mirrored, reverse, abelian, kept, fixed))
    plan = SymmetryPlan(terms, kept, order, abelian, tuple(magnetic), kept.name)
    _check_dimensions(plan, model.n_states)
    return plan


def _magnetic_sector(
    twice_m: int,
    mirrored: bool,
    reverse: bool,
    abelian: AbelianGroup,
    kept: Conserved,
    fixed: _FixedCounts,
) -> MagneticSector:
    a = abelian.order
    counts = np.array([fixed(p, False).get(twice_m, 0) for p in abelian.elements], dtype=float)
    counts_reversed = np.zeros(a)
    permutations, flags = abelian.elements, np.zeros(a, dtype=bool)
    modulus = abelian.modulus
    if reverse:
        counts_reversed[:] = [fixed(p, True).get(twice_m, 0) for p in abelian.elements]
        permutations = np.concatenate([permutations, permutations])
        flags = np.concatenate([flags, ~flags])
        # The reversal's own character −1 needs an even modulus.
        modulus = 2 * modulus
    scale = modulus // abelian.modulus
    table = np.exp(-2j * np.pi * abelian.exponents / abelian.modulus)
    plain = (table @ counts).real / a
    turned = (table @ counts_reversed).real / a
    sectors = []
    for star in abelian.stars(kept.real):
        for parity in (1, -1) if reverse else (0,):
            character = star[0]
            if reverse:
                dimension = round((plain[character] + parity * turned[character]) / 2)
            else:
                dimension = round(plain[character])
            if dimension == 0:
                continue
            phases = abelian.exponents[character] * scale
            if reverse:
                shift = 0 if parity == 1 else modulus // 2
                phases = np.concatenate([phases, (phases + shift) % modulus])
            sectors.append(
                Sector(
                    twice_m=twice_m,
                    character=character,
                    parity=parity,
                    dimension=dimension,
                    star=len(star),
                    mirrored=mirrored,
                    conjugating=abelian.conjugating(character) if kept.real else None,
                    phases=phases,
                )
            )
    orbits = (counts.sum() + counts_reversed.sum()) / len(permutations)
    return MagneticSector(
        twice_m,
        round(counts[0]),
        round(orbits),
        SymmetryElements(permutations, flags, modulus),
        tuple(sectors),
    )


def _check_dimensions(plan: SymmetryPlan, n_states: int) -> None:
    """The blocks, with their stars and mirror images, must fill the space they stand for."""

    def differ(found: int, expected: int) -> bool:
        # Beyond 2⁵⁰ states the character sums are no longer exact integers (survey only).
        return abs(found - expected) > (1e-9 * expected if expected > 2**50 else 0)

    for m in plan.magnetic:
        total = sum(s.dimension * s.star for s in m.sectors)
        if differ(total, m.configurations):
            raise SpectrumError(
                f"the blocks at 2M = {m.twice_m} hold {total} of {m.configurations} states; "
                "this is a fault of the program, please report it with the model file"
            )
    if not plan.conserved.total_spin:
        states = sum(s.dimension * s.multiplicity for s in plan.sectors)
        if differ(states, n_states):
            raise SpectrumError(
                f"the blocks hold {states} of {n_states} states; "
                "this is a fault of the program, please report it with the model file"
            )
