"""Sampled spectra in a fit: the same random vectors at every step, so that χ² is smooth."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

from thermo.model.level_table import LevelTable, table_from_dataset
from thermo.model.spin_model import SpinModel
from thermo.spectrum import sampling_plan
from thermo.spectrum.sampled_run import solve_sampled
from thermo.spectrum.settings import Settings
from thermo.symmetry.sectors import plan_symmetry


class SampledLevels:
    """A solver of sampled spectra for ``fit(solver=...)`` and ``fit(method="sampled")``.

    All that decides which random numbers are drawn is settled at the start: the seed, how many
    vectors, which sectors. What differs between two couplings is then their physics, not noise;
    what the vectors' choice itself shifts is told by another ``seed``. Slopes are taken by
    differences: two solves for each independent coupling but one, at every step.
    """

    method = "sampled"

    def __init__(
        self,
        model: SpinModel,
        settings: Settings | None = None,
        memory: int | float | str | None = None,
    ) -> None:
        self.model = model
        self.memory = memory
        plan = plan_symmetry(model, generic=True, use_total_spin=False)
        complete = sampling_plan.complete(plan, settings or Settings())
        # An accuracy to reach would change the number of vectors from step to step.
        self.settings = replace(complete, accuracy=None)
        self.resolved = plan.resolved

    def table(self, couplings: Mapping[str, float] | None = None) -> LevelTable:
        """The sampled levels at the given couplings (the model's own where not named)."""
        model = self.model.with_couplings(couplings or {})
        return table_from_dataset(solve_sampled(model, self.settings, memory=self.memory))
