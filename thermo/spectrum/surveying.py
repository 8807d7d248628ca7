"""What solving a model would involve: ``survey``."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

from thermo.errors import MemoryLimitError, RangeError
from thermo.model.spin_model import SpinModel
from thermo.spectrum import sampling_plan
from thermo.spectrum.memory import memory_limit, size_text
from thermo.spectrum.planning import check_model, grouped, memory_needed, time_needed
from thermo.spectrum.settings import check_sampling
from thermo.spectrum.threads import thread_count
from thermo.symmetry.sectors import Sector, SymmetryPlan, plan_symmetry

# A full spectrum is exact: worth waiting for so long rather than to sample.
_WORTH_WAITING = 120.0
# Where sampling does not fit either, a full spectrum may take so long.
_PATIENCE = 4 * 3600.0


@dataclass(frozen=True)
class SectorPlan:
    """One kind of block: how large, how many of the whole space are equal to it, and whether
    it would be diagonalised ("full") or sampled ("sampled")."""

    label: str
    magnetic_number: float
    dimension: int
    multiplicity: int
    real: bool
    method: str


@dataclass(frozen=True, repr=False)
class Plan:
    """What solving a model would involve; see ``survey``.

    ``method`` is "full" or "sampled", or "none" where neither fits into memory; ``vectors`` are
    the random vectors per sampled sector (0 for a full spectrum).
    ``conserved`` is "total_spin", "magnetic_number", "parity" or "none"; ``group_order``
    counts the site permutations that leave H unchanged and ``abelian_order`` those used to
    split it; ``memory_bytes`` is the peak of that method, ``seconds`` its time on this
    machine. ``largest`` is the largest block's dimension.
    """

    title: str
    sites: int
    bonds: int
    couplings: dict[str, float]
    energy_unit: str
    conserved: str
    group_order: int
    abelian_order: int
    spin_reversal: bool
    sectors: tuple[SectorPlan, ...]
    n_states: int
    largest: int
    memory_bytes: int
    memory_limit: int
    seconds: float
    method: str
    vectors: int
    notes: tuple[str, ...]

    def __str__(self) -> str:
        """One line; the whole table is the command ``partita survey`` or ``as_dict``."""
        return (
            f"Plan({self.title!r}: {self.sites} sites, {len(self.sectors)} blocks, largest "
            f"{grouped(self.largest)}, {size_text(self.memory_bytes)}, method {self.method})"
        )

    __repr__ = __str__

    def as_dict(self) -> dict[str, Any]:
        """The plan as plain data."""
        return asdict(self)


def survey(
    model: SpinModel,
    memory: int | float | str | None = None,
    method: str = "auto",
    **sampling: Any,
) -> Plan:
    """What solving a model would involve, without solving it.

    ``memory``: the limit in bytes or as a text ("4 GiB"); None means what is free now.
    ``method`` and ``sampling`` (vectors, steps, full_below, ...) are those of ``solve``. The
    symmetry is found, the blocks are counted (exactly, for any size), memory and time are
    estimated with a short probe of this machine; nothing large is allocated. The time is a
    forecast for an idle machine, good to about a factor of two.
    """
    check_model(model, "survey")
    if method not in ("full", "auto", "sampled"):
        raise RangeError(f"method {method!r} is unknown; use 'full', 'sampled' or 'auto'")
    limit = memory_limit(memory)
    settings = check_sampling(**sampling)
    notes = list(model.notes)
    symmetry = plan_symmetry(model)
    cores = thread_count()
    full_bytes = memory_needed(symmetry, cores)
    if full_bytes > limit:
        full_bytes = memory_needed(symmetry)  # then one block after the other
    seconds = time_needed(symmetry)
    fits = full_bytes <= limit
    quick = fits and seconds <= _WORTH_WAITING
    chosen, vectors, needed = "full", 0, full_bytes
    shown, below = symmetry, symmetry.sectors
    if method == "sampled" or (method == "auto" and not quick):
        sampled = plan_symmetry(model, use_total_spin=False)
        full_settings = sampling_plan.complete(sampled, settings)
        try:
            cost = sampling_plan.cost(sampled, full_settings, limit, cores)
        except MemoryLimitError as fault:
            if method == "sampled" or not fits or seconds > _PATIENCE:
                chosen = "none"
                reason = "memory" if not fits else "time"
                notes.append(f"the full spectrum exceeds the {reason} at hand, and {fault}")
        else:
            chosen, shown = "sampled", sampled
            needed, seconds = cost.memory_bytes, cost.seconds
            vectors = sampling_plan.vectors_used(full_settings)
            limit_dimension = full_settings.full_below or 0
            below = [s for s in sampled.sectors if s.dimension <= limit_dimension]
    elif not fits:
        chosen = "none"
        notes.append("the full spectrum exceeds the memory at hand; use method 'sampled'")
    return Plan(
        title=model.title,
        sites=len(model.sites),
        bonds=len({(min(b.i, b.j), max(b.i, b.j)) for b in model.bonds}),
        couplings=dict(model.couplings),
        energy_unit=model.energy_unit,
        conserved=symmetry.conserved.name,
        group_order=symmetry.group_order,
        abelian_order=symmetry.abelian.order,
        spin_reversal=any(s.parity for s in shown.sectors),
        sectors=_sector_plans(shown, below),
        n_states=model.n_states,
        largest=max(s.dimension for s in shown.sectors),
        memory_bytes=needed,
        memory_limit=limit,
        seconds=seconds,
        method=chosen,
        vectors=vectors,
        notes=tuple(notes),
    )


def _sector_plans(plan: SymmetryPlan, full: Sequence[Sector]) -> tuple[SectorPlan, ...]:
    solved = {id(s) for s in full}
    return tuple(
        SectorPlan(
            label=_label(s.twice_m, s.character, s.parity, plan),
            magnetic_number=s.twice_m / 2,
            dimension=s.dimension,
            multiplicity=s.multiplicity,
            real=s.real,
            method="full" if id(s) in solved else "sampled",
        )
        for s in plan.sectors
    )


def _label(twice_m: int, character: int, parity: int, plan: SymmetryPlan) -> str:
    m = f"{twice_m // 2}" if twice_m % 2 == 0 else f"{twice_m}/2"
    if plan.conserved.modulus == 0:
        text = f"M = {m}"
    elif plan.conserved.modulus == 2:
        text = f"M = {m} modulo 2"
    else:
        text = "all M"
    if plan.abelian.order > 1:
        text += f", character {character}"
    if parity:
        text += ", even" if parity > 0 else ", odd"
    return text
