"""Random liquors shared by tests and benchmarks."""

import numpy as np

from dosewright.chemistry.system import System


def random_totals(
    system: System, rng: np.random.Generator, count: int, *, low: float = 1e-6, high: float = 1.0
) -> np.ndarray:
    """Totals (count, nc), electroneutral; log-uniform amounts, three components in ten absent.

    The charge is closed by Na+ or Cl- after a random excess of strong acid or base.
    """
    components = list(system.components)
    h, na, cl = (components.index(c) for c in ("H+", "Na+", "Cl-"))
    span = np.log10([low, high])
    totals = 10.0 ** rng.uniform(*span, (count, len(components)))
    totals[rng.random(totals.shape) < 0.3] = 0.0
    size = 10.0 ** rng.uniform(np.log10(max(low, 1e-6)), np.log10(high), count)
    totals[:, h] = rng.choice([-1.0, 1.0], count) * size
    charge = totals @ system.component_charge
    totals[:, cl] += np.where(charge > 0.0, charge, 0.0)
    totals[:, na] += np.where(charge < 0.0, -charge, 0.0)
    return totals
