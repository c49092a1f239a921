"""Compiled kernel: one vessel's equilibrium as a convex problem in log activities.

With activity coefficients held, the equilibrium of total amounts ``T`` is the minimum over
``x = ln(activity of the components)`` of ``sum exp(lnK_i + nu_i.x) - T.x`` subject to
``A x <= B``; the multipliers of the constraints are the moles of the phases (the dual of a
geometric program: White, Johnson and Dantzig 1958; Passy and Wilde 1968). The kernel

1. follows a homotopy in which phase k holds ``n0_k exp((A_k.x - B_k)/tau)`` moles, so that it is
   one more exponential, while ``tau`` falls: no active set has to be guessed from afar;
2. finishes with a Newton iteration on the optimality conditions of the active set;
3. repeats this around the activity coefficients, the water activity and the mass of water.

Everything is per problem; a batch is a loop. Nothing here knows names, units or files.
"""

import numpy as np
from numba import njit

EXP_CAP = 250.0  # largest exponent taken; beyond it a start is simply 'far too much'
TAU_STEPS = (1.0, 0.25, 0.06, 0.015, 0.004)
LOG_IMBALANCE = 0.02  # at which the homotopy hands over to the active set
BALANCE_TARGET = 1e-13  # relative balance residual at which an inner solve stops
MAX_OUTER = 80

STATUS_OK = 0
STATUS_INNER_FAILED = 1
STATUS_OUTER_FAILED = 2
STATUS_DRY = 3

ACTIVITY_IDEAL = 0
ACTIVITY_DAVIES = 1


@njit(cache=True, nogil=True, error_model="numpy")
def _lu_solve(M, b, n):
    """Solve ``M y = b`` in place with row-scaled partial pivoting; return False when singular."""
    scale = np.empty(n)
    for i in range(n):
        s = 0.0
        for j in range(n):
            a = abs(M[i, j])
            s = max(s, a)
        if not s > 0.0:
            return False
        scale[i] = 1.0 / s
    for k in range(n):
        p = k
        best = -1.0
        for i in range(k, n):
            v = abs(M[i, k]) * scale[i]
            if v > best:
                best = v
                p = i
        if not best > 1e-15:
            return False
        if p != k:
            for j in range(n):
                t = M[k, j]
                M[k, j] = M[p, j]
                M[p, j] = t
            t = b[k]
            b[k] = b[p]
            b[p] = t
            scale[p] = scale[k]
        inv = 1.0 / M[k, k]
        for i in range(k + 1, n):
            f = M[i, k]
            if f != 0.0:
                f *= inv
                for j in range(k + 1, n):
                    M[i, j] -= f * M[k, j]
                b[i] -= f * b[k]
    for i in range(n - 1, -1, -1):
        s = b[i]
        for j in range(i + 1, n):
            s -= M[i, j] * b[j]
        b[i] = s / M[i, i]
    return True


@njit(cache=True, nogil=True, error_model="numpy")
def _evaluate(x, lnK, ptr, idx, val, m):
    """Fill ``m`` with the molalities at ``x``."""
    for i in range(lnK.shape[0]):
        y = lnK[i]
        for p in range(ptr[i], ptr[i + 1]):
            y += val[p] * x[idx[p]]
        m[i] = np.exp(min(y, EXP_CAP))


@njit(cache=True, nogil=True, error_model="numpy")
def _log_balances(x, T, base, ptr, idx, val, slope, c, nc, P, N, F):
    """Fill the amounts ``c`` and every balance's terms; return the sum of squares of ``F``.

    ``P`` and ``N`` are the positive and negative terms, ``F = ln(N/P)``.
    """
    for j in range(nc):
        P[j] = max(-T[j], 1e-300)
        N[j] = max(T[j], 1e-300)
    for i in range(base.shape[0]):
        y = base[i]
        for p in range(ptr[i], ptr[i + 1]):
            y += slope[p] * x[idx[p]]
        c[i] = np.exp(min(y, EXP_CAP))
        for p in range(ptr[i], ptr[i + 1]):
            v = val[p] * c[i]
            if v > 0.0:
                P[idx[p]] += v
            else:
                N[idx[p]] -= v
    total = 0.0
    for j in range(nc):
        F[j] = np.log(N[j] / P[j])
        total += F[j] * F[j]
    return total


@njit(cache=True, nogil=True, error_model="numpy")
def _with_phases(lnK, ptr, idx, val, A, B, n0, tau, nc, nk):
    """Append the phases to the species' rows: amount n0 exp((A.x - B)/tau), slope A/tau."""
    ns = lnK.shape[0]
    count = ptr[ns]
    for k in range(nk):
        for j in range(nc):
            if A[k, j] != 0.0:
                count += 1
    base = np.empty(ns + nk)
    jptr = np.empty(ns + nk + 1, np.int64)
    jidx = np.empty(count, np.int64)
    jval = np.empty(count)
    jslope = np.empty(count)
    fill = ptr[ns]
    base[:ns] = lnK
    jptr[: ns + 1] = ptr[: ns + 1]
    jidx[:fill] = idx[:fill]
    jval[:fill] = val[:fill]
    jslope[:fill] = val[:fill]
    for k in range(nk):
        base[ns + k] = np.log(n0[k]) - B[k] / tau
        for j in range(nc):
            if A[k, j] != 0.0:
                jidx[fill] = j
                jval[fill] = A[k, j]
                jslope[fill] = A[k, j] / tau
                fill += 1
        jptr[ns + k + 1] = fill
    return base, jptr, jidx, jval, jslope


@njit(cache=True, nogil=True, error_model="numpy")
def _lower_start(x, T, base, ptr, idx, val, slope):
    """Lower a start until no species or phase holds more than its scarcest component allows.

    A sulfide e^40 times too much dominates the balances of metal, sulfide and protons alike, which
    leaves Newton's matrix all but singular; taking the scarcest component down undoes that.
    """
    for _ in range(6):
        high = 0.0
        for i in range(base.shape[0]):
            y = base[i]
            scarce = -1
            room = 1e300
            steep = 1.0
            for p in range(ptr[i], ptr[i + 1]):
                j = idx[p]
                y += slope[p] * x[j]
                if val[p] > 0.0 and T[j] > 0.0 and T[j] / val[p] < room:
                    room = T[j] / val[p]
                    scarce = j
                    steep = slope[p]
            if scarce >= 0:
                excess = y - np.log(room)
                if excess > 0.0:
                    x[scarce] -= excess / steep
                    high = max(high, excess)
        if high < 1.0:
            break


@njit(cache=True, nogil=True, error_model="numpy")
def _homotopy(x, T, lnK, ptr, idx, val, A, B, n0, tau, n, nc, nk, max_iter, fresh):
    """Minimise the smoothed convex function at ``tau``; return the largest log imbalance left.

    A balance is ``P_j = N_j``, its positive over its negative terms. Newton on ``ln P - ln N``
    is nearly linear and converges from both sides of a plateau, where Newton on ``P - N`` creeps
    or leaps; its steps are accepted while they reduce the log imbalance. Where they do not, a
    damped Newton step on the convex function, whose length ln(1 + b)/b with b the largest change
    of an exponent is known to descend for sums of exponentials, carries on.
    """
    base, jptr, jidx, jval, jslope = _with_phases(lnK, ptr, idx, val, A, B, n0, tau, nc, nk)
    rows = base.shape[0]
    c = np.empty(rows)
    P = np.empty(nc)
    N = np.empty(nc)
    F = np.empty(nc)
    Fn = np.empty(nc)
    Pn = np.empty(nc)
    Nn = np.empty(nc)
    d = np.empty(nc)
    D = np.empty(nc)
    xn = np.empty(nc)
    JP = np.empty((nc, nc))
    JN = np.empty((nc, nc))
    M = np.empty((nc, nc))
    if fresh:
        _lower_start(x, T, base, jptr, jidx, jval, jslope)
    merit = _log_balances(x, T, base, jptr, jidx, jval, jslope, c, nc, P, N, F)
    convex_steps = 0
    worst = 0.0
    for _ in range(max_iter):
        worst = 0.0
        for j in range(nc):
            worst = max(worst, abs(F[j]))
        if worst < LOG_IMBALANCE:
            break
        JP[:] = 0.0
        JN[:] = 0.0
        for i in range(rows):
            amount = c[i]
            if amount == 0.0:
                continue
            for p in range(jptr[i], jptr[i + 1]):
                j = jidx[p]
                v = jval[p] * amount
                if v > 0.0:
                    for q in range(jptr[i], jptr[i + 1]):
                        JP[j, jidx[q]] += v * jslope[q]
                else:
                    for q in range(jptr[i], jptr[i + 1]):
                        JN[j, jidx[q]] -= v * jslope[q]
        accepted = False
        merit_new = merit
        if convex_steps == 0:
            for j in range(nc):
                d[j] = F[j]
                for q in range(nc):
                    M[j, q] = JP[j, q] / P[j] - JN[j, q] / N[j]
            if _lu_solve(M, d, nc):
                big = 0.0
                for j in range(nc):
                    big = max(big, abs(d[j]))
                if np.isfinite(big) and big < 1e4:
                    step = min(1.0, 15.0 / big)
                    for _half in range(5):
                        for j in range(nc):
                            xn[j] = x[j] + step * d[j]
                        merit_new = _log_balances(
                            xn, T, base, jptr, jidx, jval, jslope, c, nc, Pn, Nn, Fn
                        )
                        if merit_new < merit * (1.0 - 0.1 * step):
                            accepted = True
                            break
                        step *= 0.4
        else:
            convex_steps -= 1
        if not accepted:
            if convex_steps == 0:
                convex_steps = 4
            for j in range(nc):
                D[j] = 1.0 / np.sqrt(max(JP[j, j] - JN[j, j], 1e-280))
            for j in range(nc):
                for q in range(nc):
                    M[j, q] = (JP[j, q] - JN[j, q]) * D[j] * D[q]
                M[j, j] += 1e-9
                d[j] = (N[j] - P[j]) * D[j]
            if not _lu_solve(M, d, nc):
                return worst
            for j in range(nc):
                d[j] *= D[j]
            b = 0.0
            for i in range(rows):
                y = 0.0
                for p in range(jptr[i], jptr[i + 1]):
                    y += jslope[p] * d[jidx[p]]
                b = max(b, abs(y))
            if not np.isfinite(b) or b == 0.0:
                return worst
            step = np.log1p(b) / b
            for j in range(nc):
                xn[j] = x[j] + step * d[j]
            merit_new = _log_balances(xn, T, base, jptr, jidx, jval, jslope, c, nc, Pn, Nn, Fn)
        for j in range(nc):
            x[j] = xn[j]
            P[j] = Pn[j]
            N[j] = Nn[j]
            F[j] = Fn[j]
        merit = merit_new
    ns = rows - nk
    for k in range(nk):
        n[k] = c[ns + k]
    return worst


@njit(cache=True, nogil=True, error_model="numpy")
def _enter(add, A, n, active, nc, nk):
    """Let phase ``add`` in; when it is a mixture of phases present, the first used up leaves."""
    na = 0
    order = np.empty(nk, np.int64)
    for k in range(nk):
        if active[k]:
            order[na] = k
            na += 1
    active[add] = True
    if na == 0:
        return
    gram = np.zeros((na, na))
    v = np.zeros(na)
    for a in range(na):
        for c in range(na):
            for j in range(nc):
                gram[a, c] += A[order[a], j] * A[order[c], j]
        for j in range(nc):
            v[a] += A[order[a], j] * A[add, j]
    if not _lu_solve(gram, v, na):
        return
    for j in range(nc):
        r = A[add, j]
        for a in range(na):
            r -= v[a] * A[order[a], j]
        if abs(r) > 1e-9:
            return
    leave = -1
    ratio = 1e300
    for a in range(na):
        if v[a] > 1e-9 and max(n[order[a]], 0.0) / v[a] < ratio:
            ratio = max(n[order[a]], 0.0) / v[a]
            leave = order[a]
    if leave >= 0:
        active[leave] = False
        n[leave] = 0.0


@njit(cache=True, nogil=True, error_model="numpy")
def _active_set(x, T, lnK, ptr, idx, val, m, A, B, n, active, nc, nk, max_iter):
    """Newton on the optimality conditions; phases leave when negative, enter when supersaturated.

    Returns the relative balance residual reached (below ``BALANCE_TARGET`` or the best there is)
    with ``x``, ``m``, ``n`` and ``active`` updated, or a negative number on failure.
    """
    g = np.zeros(nc)
    size = np.zeros(nc)
    H = np.zeros((nc, nc))
    order = np.empty(nk, np.int64)
    most = np.empty(nk)
    best = 1e300
    stall = 0
    changes = 0
    for _ in range(max_iter):
        _evaluate(x, lnK, ptr, idx, val, m)
        for j in range(nc):
            g[j] = -T[j]
            size[j] = abs(T[j])
            for q in range(nc):
                H[j, q] = 0.0
        for i in range(lnK.shape[0]):
            c = m[i]
            for p in range(ptr[i], ptr[i + 1]):
                j = idx[p]
                v = val[p] * c
                g[j] += v
                size[j] = max(size[j], abs(v))
                for q in range(ptr[i], ptr[i + 1]):
                    H[j, idx[q]] += v * val[q]
        # residual with the present multipliers, for the stopping test
        worst = 0.0
        for j in range(nc):
            r = g[j]
            s = size[j]
            for k in range(nk):
                if active[k]:
                    r += A[k, j] * n[k]
                    s = max(s, abs(A[k, j] * n[k]))
            worst = max(worst, abs(r) / s)
        gap = 0.0
        for k in range(nk):
            if active[k]:
                s = -B[k]
                for j in range(nc):
                    s += A[k, j] * x[j]
                gap = max(gap, abs(s))
        if gap < 1e-11 and worst < 1e-8:
            stall = stall + 1 if worst >= 0.5 * best else 0
            best = min(best, worst)
            if worst < BALANCE_TARGET or stall >= 2:
                # converged on this active set: is it the right one?
                drop = -1
                low = 0.0
                for k in range(nk):
                    if active[k]:
                        cap = 1e300
                        for j in range(nc):
                            if A[k, j] != 0.0:
                                cap = min(cap, size[j] / abs(A[k, j]))
                        if n[k] < low - 1e-13 * cap and n[k] / cap < low:
                            low = n[k] / cap
                            drop = k
                if drop >= 0:
                    active[drop] = False
                    n[drop] = 0.0
                else:
                    add = -1
                    high = 1e-11
                    for k in range(nk):
                        if not active[k]:
                            s = -B[k]
                            for j in range(nc):
                                s += A[k, j] * x[j]
                            if s > high:
                                high = s
                                add = k
                    if add < 0:
                        for k in range(nk):
                            if active[k] and n[k] < 0.0:
                                n[k] = 0.0
                        return worst
                    _enter(add, A, n, active, nc, nk)
                changes += 1
                if changes > 3 * nk + 10:
                    return -1.0
                best = 1e300
                stall = 0
        # Newton step: each balance over its own size, each phase over the most there can be of
        # it, ln activities as they are; traces then weigh as much as majors
        na = 0
        for k in range(nk):
            if active[k]:
                order[na] = k
                na += 1
        dim = nc + na
        M = np.zeros((dim, dim))
        b = np.zeros(dim)
        for j in range(nc):
            for q in range(nc):
                M[j, q] = H[j, q] / size[j]
            b[j] = -g[j] / size[j]
        for a in range(na):
            k = order[a]
            cap = 1e300
            s = -B[k]
            for j in range(nc):
                s += A[k, j] * x[j]
                if A[k, j] != 0.0:
                    cap = min(cap, size[j] / abs(A[k, j]))
            most[a] = cap
            for j in range(nc):
                M[nc + a, j] = A[k, j]
                M[j, nc + a] = A[k, j] * cap / size[j]
            b[nc + a] = -s
        if not _lu_solve(M, b, dim):
            # dependent phases: the one with least amount leaves
            if na == 0:
                return -2.0
            drop = order[0]
            for a in range(na):
                if n[order[a]] <= n[drop]:
                    drop = order[a]
            active[drop] = False
            n[drop] = 0.0
            changes += 1
            if changes > 3 * nk + 10:
                return -1.0
            continue
        big = 0.0
        for j in range(nc):
            if not np.isfinite(b[j]):
                return -3.0
        for i in range(lnK.shape[0]):
            yd = 0.0
            for p in range(ptr[i], ptr[i + 1]):
                yd += val[p] * b[idx[p]]
            # only species that matter to a balance limit the step
            big = max(big, yd)
        for j in range(nc):
            big = max(big, 0.25 * abs(b[j]))
        step = 1.0
        if big > 2.0:
            step = 2.0 / big
        for j in range(nc):
            x[j] += step * b[j]
        for a in range(na):
            n[order[a]] = b[nc + a] * most[a]
        if step == 1.0 and big < 0.1 and changes <= 3 * nk + 10:
            # early removal of clearly negative phases saves whole inner convergences
            drop = -1
            low = 0.0
            for a in range(na):
                if b[nc + a] < low - 1e-3:
                    low = b[nc + a]
                    drop = order[a]
            if drop >= 0:
                active[drop] = False
                n[drop] = 0.0
                changes += 1
                best = 1e300
                stall = 0
    return -4.0


@njit(cache=True, nogil=True, error_model="numpy")
def _inner(x, T, lnK, ptr, idx, val, m, A, B, n, active, nc, nk, warm):
    """Equilibrium at held activity coefficients: warm Newton first, homotopy when that fails."""
    if warm:
        xs = x.copy()
        worst = _active_set(x, T, lnK, ptr, idx, val, m, A, B, n, active, nc, nk, 40)
        if worst >= 0.0:
            return worst
        x[:] = xs
    # cold start: every component a little below its total, water neutral
    n0 = np.empty(nk)
    for k in range(nk):
        cap = 1e300
        for j in range(nc):
            if A[k, j] > 0.0 and T[j] > 0.0:
                cap = min(cap, T[j] / A[k, j])
        if cap > 1e299:
            cap = 1e-3
        n0[k] = 1e-3 * cap
    worst = -9.0
    for attempt in range(3):
        for j in range(nc):
            if attempt == 2:
                x[j] = -16.0
            elif T[j] > 0.0:
                x[j] = np.log(T[j]) - (2.0 if attempt == 0 else 12.0)
            else:
                x[j] = -16.0
        for t in range(len(TAU_STEPS)):
            _homotopy(
                x,
                T,
                lnK,
                ptr,
                idx,
                val,
                A,
                B,
                n0,
                TAU_STEPS[t],
                n,
                nc,
                nk,
                300 if t == 0 else 100,
                t == 0 and attempt == 0,
            )
            xs = x.copy()
            for k in range(nk):
                active[k] = n[k] > n0[k]
            worst = _active_set(x, T, lnK, ptr, idx, val, m, A, B, n, active, nc, nk, 80)
            if worst >= 0.0:
                return worst
            x[:] = xs
            if nk == 0:
                break
    return worst


@njit(cache=True, nogil=True, error_model="numpy")
def _activity(model, params, m, z, neutral, lng):
    """Fill ``lng`` with ln(gamma); return (ionic strength, ln water activity)."""
    strength = 0.0
    total = 0.0
    for i in range(m.shape[0]):
        strength += 0.5 * z[i] * z[i] * m[i]
        total += m[i]
    if model == ACTIVITY_IDEAL:
        for i in range(m.shape[0]):
            lng[i] = 0.0
        return strength, 0.0
    root = np.sqrt(strength)
    f = -params[0] * (root / (1.0 + root) - params[1] * strength)
    for i in range(m.shape[0]):
        lng[i] = z[i] * z[i] * f + neutral[i] * strength
    return strength, -params[2] * total


@njit(cache=True, nogil=True, error_model="numpy")
def solve(
    totals,  # (N, nc) mol, or mol per kg of water when water_mol <= 0
    water_mol,  # (N,) mol of H2O component held by the vessel; <= 0: one kg of solvent
    lnK,  # (ns,)
    ptr,
    idx,
    val,  # species stoichiometry over the components, by rows
    nu_w,  # (ns,)
    z,  # (ns,)
    neutral,  # (ns,) ln(gamma) per ionic strength of dissolved gases
    A,  # (nk, nc)
    A_w,  # (nk,)
    lnKs,  # (N, nk): per problem, for gases at their own pressure
    enabled,  # (N, nk) phase may form
    held,  # (nc,) True where the component's activity is held
    x_held,  # (N, nc)
    model,
    params,
    x_io,  # (N, nc) start when warm, result
    n_io,  # (N, nk)
    lng_io,  # (N, ns)
    warm,  # (N,)
    m_out,  # (N, ns)
    info,  # (N, 8)
):
    """Solve every problem of the batch; ``info`` holds the status and the certificate's figures.

    Columns of ``info``: status, relative balance residual, largest supersaturation of an absent
    phase (ln), largest |ln(Q/K)| of a present phase, ionic strength, ln water activity, kg of
    water, last change of ln gamma.
    """
    N, nc = totals.shape
    ns = lnK.shape[0]
    nk = A.shape[0]
    for r in range(N):
        # compact the problem: drop components with nothing in them, fold held ones into K
        col = np.full(nc, -1, np.int64)
        nca = 0
        absent = np.zeros(nc, np.bool_)
        for j in range(nc):
            if held[j]:
                continue
            one_sided = True
            if totals[r, j] == 0.0:
                for i in range(ns):
                    for p in range(ptr[i], ptr[i + 1]):
                        if idx[p] == j and val[p] < 0.0:
                            one_sided = False
                if one_sided:
                    absent[j] = True
                    continue
            col[j] = nca
            nca += 1
        rows = np.empty(ns, np.int64)
        cptr = np.zeros(ns + 1, np.int64)
        cidx = np.empty(ptr[ns], np.int64)
        cval = np.empty(ptr[ns])
        base = np.empty(ns)
        nsa = 0
        fill = 0
        for i in range(ns):
            use = True
            offset = lnK[i]
            for p in range(ptr[i], ptr[i + 1]):
                j = idx[p]
                if absent[j]:
                    use = False
                elif held[j]:
                    offset += val[p] * x_held[r, j]
            if not use:
                continue
            for p in range(ptr[i], ptr[i + 1]):
                j = idx[p]
                if not held[j]:
                    cidx[fill] = col[j]
                    cval[fill] = val[p]
                    fill += 1
            rows[nsa] = i
            base[nsa] = offset
            nsa += 1
            cptr[nsa] = fill
        krow = np.empty(nk, np.int64)
        nka = 0
        CA = np.zeros((nk, nca))
        B0 = np.empty(nk)
        for k in range(nk):
            if not enabled[r, k]:
                continue
            use = True
            rhs = lnKs[r, k]
            free = False
            for j in range(nc):
                if A[k, j] != 0.0:
                    if absent[j]:
                        use = False
                    elif held[j]:
                        rhs -= A[k, j] * x_held[r, j]
                    else:
                        free = True
            if not use or not free:
                continue
            for j in range(nc):
                if col[j] >= 0:
                    CA[nka, col[j]] = A[k, j]
            B0[nka] = rhs
            krow[nka] = k
            nka += 1
        T = np.empty(nca)
        x = np.empty(nca)
        for j in range(nc):
            if col[j] >= 0:
                T[col[j]] = totals[r, j]
                x[col[j]] = x_io[r, j]
        CA = CA[:nka].copy()
        n = np.zeros(nka)
        active = np.zeros(nka, np.bool_)
        is_warm = warm[r]
        for k in range(nka):
            n[k] = n_io[r, krow[k]]
            active[k] = is_warm and n[k] > 0.0
        m = np.zeros(nsa)
        lng = np.zeros(nsa)
        lng_new = np.zeros(nsa)
        lng_prev = np.zeros(nsa)
        res_prev = np.zeros(nsa)
        zc = np.empty(nsa)
        nc_neutral = np.empty(nsa)
        for i in range(nsa):
            zc[i] = z[rows[i]]
            nc_neutral[i] = neutral[rows[i]]
            if is_warm:
                lng[i] = lng_io[r, rows[i]]
        lnaw = info[r, 5] if is_warm else 0.0
        kg = 1.0
        if water_mol[r] > 0.0:
            kg = info[r, 6] if is_warm and info[r, 6] > 0.0 else water_mol[r] * 0.01801528
        lnKe = np.empty(nsa)
        Be = np.empty(nka)
        Tk = np.empty(nca)
        status = STATUS_OUTER_FAILED
        worst = 1.0
        change = 1.0
        strength = 0.0
        for outer in range(MAX_OUTER):
            for i in range(nsa):
                lnKe[i] = base[i] + nu_w[rows[i]] * lnaw - lng[i]
            for k in range(nka):
                Be[k] = B0[k] - A_w[krow[k]] * lnaw
            for j in range(nca):
                Tk[j] = T[j] / kg
            worst = _inner(
                x,
                Tk,
                lnKe,
                cptr,
                cidx,
                cval,
                m,
                CA,
                Be,
                n,
                active,
                nca,
                nka,
                is_warm or outer > 0,
            )
            if worst < 0.0:
                status = STATUS_INNER_FAILED
                break
            strength, lnaw_new = _activity(model, params, m, zc, nc_neutral, lng_new)
            change = abs(lnaw_new - lnaw)
            dot = 0.0
            nrm = 0.0
            for i in range(nsa):
                res = lng_new[i] - lng[i]
                # species below any balance's notice do not hold up the iteration
                change = max(change, abs(res))
                dres = res - res_prev[i]
                dot += res * dres
                nrm += dres * dres
            kg_new = kg
            if water_mol[r] > 0.0:
                bound = 0.0
                for i in range(nsa):
                    bound += nu_w[rows[i]] * m[i]
                for k in range(nka):
                    bound += A_w[krow[k]] * n[k]
                kg_new = (water_mol[r] - bound * kg) * 0.01801528
                if not kg_new > 0.02 * water_mol[r] * 0.01801528:
                    status = STATUS_DRY
                    break
                change = max(change, abs(kg_new / kg - 1.0))
            if change < 1e-12:
                status = STATUS_OK
                break
            # secant along the last residual (Anderson, depth one), plain step when it misleads
            theta = 0.0
            if outer > 0 and nrm > 0.0:
                theta = dot / nrm
                if abs(theta) > 1.0:
                    theta = 0.0
            for i in range(nsa):
                res = lng_new[i] - lng[i]
                mixed = lng_new[i] - theta * (lng_new[i] - lng_prev[i] - res_prev[i])
                lng_prev[i] = lng[i]
                res_prev[i] = res
                lng[i] = mixed
            lnaw = lnaw_new
            kg = kg_new
        # results in the caller's order
        for i in range(ns):
            m_out[r, i] = 0.0
            lng_io[r, i] = 0.0
        for i in range(nsa):
            m_out[r, rows[i]] = m[i]
            lng_io[r, rows[i]] = lng[i]
        # coefficients of species that are absent here are still properties of the solution
        if model == ACTIVITY_DAVIES:
            root = np.sqrt(strength)
            f = -params[0] * (root / (1.0 + root) - params[1] * strength)
            for i in range(ns):
                lng_io[r, i] = z[i] * z[i] * f + neutral[i] * strength
        for k in range(nk):
            n_io[r, k] = 0.0
        high = -1e300
        tight = 0.0
        for k in range(nka):
            s = -Be[k]
            for j in range(nca):
                s += CA[k, j] * x[j]
            if active[k]:
                n_io[r, krow[k]] = n[k]
                tight = max(tight, abs(s))
            else:
                high = max(high, s)
        for j in range(nc):
            if held[j]:
                x_io[r, j] = x_held[r, j]
            elif col[j] >= 0:
                x_io[r, j] = x[col[j]]
            else:
                x_io[r, j] = -np.inf
        info[r, 0] = status
        info[r, 1] = worst
        info[r, 2] = high
        info[r, 3] = tight
        info[r, 4] = strength
        info[r, 5] = lnaw
        info[r, 6] = kg
        info[r, 7] = change
