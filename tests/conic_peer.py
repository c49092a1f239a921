"""The same equilibrium handed to a general-purpose conic solver (clarabel's exponential cones)."""

import clarabel
import numpy as np
from scipy import sparse

from dosewright.chemistry.system import System


class ConicPeer:
    """minimise sum(t) - T.x with t_i >= exp(lnK_i + nu_i.x) and A x <= lnKs, activity off."""

    def __init__(self, system: System, enabled: np.ndarray) -> None:
        self.system = system
        self.rows = np.flatnonzero(enabled)

    def problem(self, totals: np.ndarray) -> tuple:
        system = self.system
        keep_c = (totals != 0.0) | (np.array(system.components) == "H+")
        keep_s = ~(system.nu[:, ~keep_c] != 0.0).any(axis=1)
        keep_k = self.rows[~(system.A[self.rows][:, ~keep_c] != 0.0).any(axis=1)]
        nu = system.nu[np.ix_(keep_s, keep_c)]
        A = system.A[np.ix_(keep_k, keep_c)]
        ns, nc = nu.shape
        # each species in units of the largest total that can hold it, so that the cones see O(1)
        scale = np.ones(ns) * max(totals.max(), 1e-9)
        lnK = system.lnK[keep_s] - np.log(scale)
        q = np.concatenate([-totals[keep_c] / scale[0], np.ones(ns)])
        blocks, rhs = [], []
        for i in range(ns):
            block = np.zeros((3, nc + ns))
            block[0, :nc] = -nu[i]
            block[2, nc + i] = -1.0
            blocks.append(block)
            rhs += [lnK[i], 1.0, 0.0]
        cone_rows = sparse.csc_matrix(np.vstack([*blocks, np.hstack([A, np.zeros((len(A), ns))])]))
        cones = [clarabel.ExponentialConeT()] * ns
        if len(A):
            cones.append(clarabel.NonnegativeConeT(len(A)))
        b = np.concatenate([rhs, system.lnKs[keep_k]])
        P = sparse.csc_matrix((nc + ns, nc + ns))
        return P, q, cone_rows, b, cones, keep_c, keep_k, scale[0]

    def solve(self, totals: np.ndarray, *, tolerance: float = 1e-9):
        """Return (status, x over kept components, phase moles over kept phases, masks, objective)."""
        P, q, A, b, cones, keep_c, keep_k, scale = self.problem(totals)
        settings = clarabel.DefaultSettings()
        settings.verbose = False
        settings.max_threads = 1
        settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = tolerance
        answer = clarabel.DefaultSolver(P, q, A, b, cones, settings).solve()
        x = np.array(answer.x)[: keep_c.sum()]
        phases = np.array(answer.z)[-len(keep_k) :] * scale if len(keep_k) else np.zeros(0)
        return str(answer.status), x, phases, keep_c, keep_k, answer.obj_val * scale
