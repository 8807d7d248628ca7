"""Clusters for the tests: plain descriptions that both the package and the naive twin read.

A ``Cluster`` is turned into a mapping in the model file's format (``mapping``) and, by the
textbook meaning of each form and bond term, into the twin's matrices (``naive_terms``).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from itertools import combinations

import numpy as np
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st

from tests import naive

#: The same examples in every run; no deadline, because kernels compile in the first one.
SETTINGS = settings(
    max_examples=60,
    derandomize=True,
    deadline=None,
    database=None,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large],
)

#: What a coupling is multiplied by under each bond term (issue of convention, not of physics).
BOND_TERMS = {"+J S.S": 1.0, "-J S.S": -1.0, "+2J S.S": 2.0, "-2J S.S": -2.0}


@dataclass(frozen=True)
class Cluster:
    """Spins, terms and couplings. bonds: (i, j, coupling, form); ions: (i, coupling, form);
    a form is a name, ("antisymmetric", vector) or a 3x3 tuple of tuples."""

    spins: tuple[float, ...]
    bonds: tuple[tuple, ...]
    couplings: dict[str, float]
    ions: tuple[tuple, ...] = ()
    bond_term: str = "+J S.S"
    g: float = 1.0
    energy_unit: str = "1"
    names: tuple[str, ...] = field(default=())

    @property
    def dimension(self) -> int:
        """Number of states."""
        return math.prod(round(2 * s) + 1 for s in self.spins)

    def mapping(self) -> dict:
        """The same cluster in the model file's format."""
        names = self.names or tuple(f"s{i}" for i in range(len(self.spins)))
        bonds = []
        for i, j, coupling, form in self.bonds:
            bond = {"sites": [names[i], names[j]], "coupling": coupling}
            if isinstance(form, str):
                bond["form"] = form
            elif form[0] == "antisymmetric":
                bond |= {"form": "antisymmetric", "vector": list(form[1])}
            else:
                bond["matrix"] = [list(row) for row in form]
            bonds.append(bond)
        ions = []
        for i, coupling, form in self.ions:
            ion = {"sites": [names[i]], "coupling": coupling}
            if isinstance(form, str):
                ion["form"] = form
            else:
                ion["matrix"] = [list(row) for row in form]
            ions.append(ion)
        result = {
            "format": 1,
            "title": "a cluster of the tests",
            "energy_unit": self.energy_unit,
            "bond_term": self.bond_term,
            "couplings": dict(self.couplings),
            "site": [
                {"name": name, "spin": float(s), "g": self.g}
                for name, s in zip(names, self.spins, strict=True)
            ],
        }
        if bonds:
            result["bond"] = bonds
        if ions:
            result["ion"] = ions
        return result

    def naive_terms(self) -> tuple[list[float], list, list]:
        """(spins, bonds, ions) for the twin, couplings, signs and factors applied."""
        forms = {"isotropic": naive.ISOTROPIC, "xy": naive.XY, "ising": naive.ISING}
        factor = BOND_TERMS[self.bond_term]
        bonds = []
        for i, j, coupling, form in self.bonds:
            if isinstance(form, str):
                matrix = forms[form]
            elif form[0] == "antisymmetric":
                matrix = naive.antisymmetric(form[1])
            else:
                matrix = np.array(form)
            bonds.append((i, j, factor * self.couplings[coupling] * matrix))
        ions = []
        for i, coupling, form in self.ions:
            if form == "axial":
                matrix = naive.axial(self.spins[i])
            elif form == "rhombic":
                matrix = naive.RHOMBIC
            else:
                matrix = np.array(form)
            ions.append((i, self.couplings[coupling] * matrix))
        return list(self.spins), bonds, ions

    def hamiltonian(self) -> np.ndarray:
        """The twin's dense H."""
        return naive.hamiltonian(*self.naive_terms())

    def relabelled(self, order: list[int]) -> Cluster:
        """The same cluster with old site i at place order[i], and its terms in another order."""
        spins = [0.0] * len(order)
        for old, new in enumerate(order):
            spins[new] = self.spins[old]
        bonds = tuple((order[i], order[j], c, f) for i, j, c, f in reversed(self.bonds))
        ions = tuple((order[i], c, f) for i, c, f in reversed(self.ions))
        return replace(self, spins=tuple(spins), bonds=bonds, ions=ions, names=())


def uniform(spins, pairs, form="isotropic", value=1.0, **more) -> Cluster:
    """One coupling J on every listed pair."""
    bonds = tuple((i, j, "J", form) for i, j in pairs)
    return Cluster(tuple(spins), bonds, {"J": value}, **more)


def ring_pairs(n: int) -> list[tuple[int, int]]:
    """Neighbours around a ring of three or more."""
    return [(i, (i + 1) % n) for i in range(n)]


def ring(n: int, spin: float = 0.5, form="isotropic", **more) -> Cluster:
    """A ring of equal spins."""
    return uniform([spin] * n, ring_pairs(n), form, **more)


def complete(n: int, spin: float = 0.5, form="isotropic", **more) -> Cluster:
    """Every pair of n equal spins joined."""
    return uniform([spin] * n, combinations(range(n), 2), form, **more)


SHAPES = {
    "open chain": lambda n: [(i, i + 1) for i in range(n - 1)],
    "ring": lambda n: ring_pairs(n) if n > 2 else [(0, 1)],
    "complete graph": lambda n: list(combinations(range(n), 2)),
    "star": lambda n: [(0, i) for i in range(1, n)],
    "wheel": lambda n: (
        [(0, i) for i in range(1, n)] + [(1 + i, 1 + (i + 1) % (n - 1)) for i in range(n - 1)]
        if n > 3
        else [(0, i) for i in range(1, n)]
    ),
    "complete bipartite": lambda n: [(i, j) for i in range(n) for j in range(i) if (i + j) % 2],
    "two rungs to n": lambda n: [(i, i + 2) for i in range(n - 2)]
    + [(i, i + 1) for i in range(0, n - 1, 2)],
    "two separate halves": lambda n: [
        (i, i + 1) for i in range(n - 1) if i + 1 != n // 2
    ],
    "cube or octahedron": lambda n: (
        [(i, i ^ b) for i in range(8) for b in (1, 2, 4) if i < i ^ b]
        if n == 8
        else [(i, j) for i, j in combinations(range(n), 2) if j - i != n // 2]
    ),
}  # fmt: skip

SPINS = [0.5, 1.0, 1.5, 2.0, 2.5]
LARGEST = 500  # states; the dense twin takes a tenth of a second there


def values():
    """Coupling values of both signs; simple fractions (which coincide) and arbitrary numbers."""
    fractions = st.integers(-12, 12).filter(bool).map(lambda k: k / 4)
    arbitrary = st.floats(0.01, 3.0, allow_nan=False).map(lambda v: round(v, 6))
    signed = st.tuples(arbitrary, st.sampled_from([1.0, -1.0])).map(lambda p: p[0] * p[1])
    return st.one_of(fractions, signed)


@st.composite
def mixed_spins(draw, largest: int = LARGEST):
    """One to eight spins of any size, few enough states."""
    n = draw(st.integers(1, 8))
    spins, room = [], largest // 2 ** (n - 1)
    for _ in range(n):
        spin = draw(st.sampled_from([s for s in SPINS if 2 * s + 1 <= max(2, room)]))
        room = room * 2 // round(2 * spin + 1)
        spins.append(spin)
    return tuple(spins)


def number():
    """A matrix or vector element."""
    return st.integers(-4, 4).map(lambda k: k / 2)


@st.composite
def matrices(draw, symmetric=False):
    """A 3x3 matrix that is not zero."""
    m = [[draw(number()) for _ in range(3)] for _ in range(3)]
    if symmetric:
        m = [[m[min(a, b)][max(a, b)] for b in range(3)] for a in range(3)]
    if not any(any(row) for row in m):
        m[2][2] = 1.0
    return tuple(tuple(row) for row in m)


#: Families of bond forms, by what they conserve.
ISOTROPIC_FORMS = st.just("isotropic")
UNIAXIAL_FORMS = st.one_of(
    st.sampled_from(["isotropic", "xy", "ising"]),
    st.sampled_from([0.5, -1.0, 2.0]).map(lambda z: ("antisymmetric", (0.0, 0.0, z))),
    st.sampled_from([-0.5, 0.3, 1.7]).map(
        lambda d: ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, d))
    ),
)
ANY_FORMS = st.one_of(
    UNIAXIAL_FORMS,
    st.tuples(number(), number(), number()).filter(any).map(lambda v: ("antisymmetric", v)),
    matrices(),
)


@st.composite
def clusters(draw, bond_forms=ANY_FORMS, ion_forms=None, largest: int = LARGEST):
    """Random clusters: any graph, several terms on one bond, bonds stated either way round."""
    spins = draw(mixed_spins(largest))
    n = len(spins)
    couplings = draw(
        st.dictionaries(st.sampled_from(["J1", "J2", "K"]), values(), min_size=1, max_size=3)
    )
    names = st.sampled_from(sorted(couplings))
    bonds = ()
    if n > 1:
        pairs = st.tuples(st.integers(0, n - 1), st.integers(0, n - 1)).filter(
            lambda p: p[0] != p[1]
        )
        picked = draw(st.lists(pairs, min_size=1, max_size=2 * n))
        bonds = tuple((i, j, draw(names), draw(bond_forms)) for i, j in picked)
    ions = ()
    if ion_forms is not None:
        sites = draw(st.lists(st.integers(0, n - 1), max_size=n))
        ions = tuple((i, draw(names), draw(ion_forms)) for i in sites)
    term = draw(st.sampled_from(sorted(BOND_TERMS)))
    return Cluster(spins, bonds, couplings, ions, term)


@st.composite
def symmetric_clusters(draw, bond_forms=ANY_FORMS, ion_forms=None, largest: int = LARGEST):
    """Clusters with many automorphisms: equal spins and couplings on a regular graph."""
    shape = draw(st.sampled_from(sorted(SHAPES)))
    spin = draw(st.sampled_from([0.5, 0.5, 1.0, 1.5]))
    most = int(math.log(largest) / math.log(2 * spin + 1))
    n = draw(st.integers(3, max(3, min(8, most))))
    if shape == "cube or octahedron" and n in (3, 5, 7):
        n = n - 1 if n > 3 else 4
    form = draw(bond_forms)
    bonds = tuple((i, j, "J", form) for i, j in SHAPES[shape](n))
    couplings = {"J": draw(values())}
    ions = ()
    if ion_forms is not None and draw(st.booleans()):
        couplings["D"] = draw(values())
        ion = draw(ion_forms)
        ions = tuple((i, "D", ion) for i in range(n))
    spins = [spin] * n
    if draw(st.booleans()) and n % 2 == 0 and spin == 0.5:
        spins = [0.5 if i % 2 else 1.0 for i in range(n)]
    if math.prod(round(2 * s) + 1 for s in spins) > largest:
        spins = [spin] * n
    term = draw(st.sampled_from(sorted(BOND_TERMS)))
    # Hide the order in which the graph was made.
    order = draw(st.permutations(range(n)))
    return Cluster(tuple(spins), bonds, couplings, ions, term).relabelled(list(order))


ION_FORMS = st.one_of(st.sampled_from(["axial", "rhombic"]), matrices(symmetric=True))
UNIAXIAL_IONS = st.just("axial")
