"""Kernel parameters of many cells from a window of looks. (fast twin of anisotropy.invert)"""

# mypy: ignore-errors
from firnlight.physics.kernel_cache import prepare

prepare()

import numba  # noqa: E402
import numpy as np  # noqa: E402

from firnlight.physics.anisotropy import (  # noqa: E402
    FITTED,
    GROUND,
    HELD_AT_ZERO,
    SCALED_PRIOR,
    SINGULAR,
    UNSEEN,
    Inversion,
    aligned,
    default_limits,
    white_sky_weights,
)


@numba.njit(nogil=True, cache=True)
def _solve(matrix, right, size, least_pivot):
    """Gauss-Jordan in place on a positive definite matrix, right sides (size, m); False where it is singular."""
    for i in range(size):
        pivot = matrix[i, i]
        if not pivot > least_pivot:
            return False
        for j in range(size):
            matrix[i, j] /= pivot
        for j in range(right.shape[1]):
            right[i, j] /= pivot
        for k in range(size):
            if k != i:
                factor = matrix[k, i]
                for j in range(size):
                    matrix[k, j] -= factor * matrix[i, j]
                for j in range(right.shape[1]):
                    right[k, j] -= factor * right[i, j]
    return True


@numba.njit(nogil=True, cache=True)
def _not_below_zero(unit, right, p, least_pivot, best):
    """Least squares with no parameter below 0; see anisotropy._not_below_zero."""
    least = 0.0
    best[:] = 0.0
    part, side, chosen = np.empty((p, p)), np.empty((p, 1)), np.empty(p, np.int64)
    for mask in range(1, (1 << p) - 1):
        size = 0
        for i in range(p):
            if (mask >> i) & 1:
                chosen[size] = i
                size += 1
        for i in range(size):
            side[i, 0] = right[chosen[i]]
            for j in range(size):
                part[i, j] = unit[chosen[i], chosen[j]]
        if not _solve(part, side, size, least_pivot):
            continue
        cost, fits = 0.0, True
        for i in range(size):
            fits = fits and side[i, 0] >= 0.0
            cost -= side[i, 0] * right[chosen[i]]
        if fits and cost < least:
            least = cost
            best[:] = 0.0
            for i in range(size):
                best[chosen[i]] = side[i, 0]


@numba.njit(nogil=True, cache=True)
def _scatter(misfit, spare, least):
    if spare > 0:
        return max(misfit / spare, least)
    return least if least > 0.0 else np.nan


@numba.njit(nogil=True, cache=True)
def _cells(
    rho, weights, design, white, shape, shape_u, has_prior, largest_u, largest_condition, spare_looks, least,
    least_pivot, codes, parameters, covariance, scatter, how, counts,
):  # fmt: skip
    unseen, fitted, held_at_zero, scaled_prior = codes
    looks, cells = rho.shape
    p = design.shape[2]
    wide_w, wide_a = weights.shape[1] > 1, design.shape[1] > 1
    normal, unit, inverse = np.empty((p, p)), np.empty((p, p)), np.empty((p, p))
    right, scale, f = np.empty(p), np.empty(p), np.empty(p)
    used = np.empty(looks, np.bool_)
    for c in range(cells):
        cw, ca = c if wide_w else 0, c if wide_a else 0
        normal[:] = 0.0
        right[:] = 0.0
        count, cross, known, power = 0, 0.0, 0.0, 0.0
        for k in range(looks):
            r, w = rho[k, c], weights[k, cw]
            good = np.isfinite(r) and np.isfinite(w) and w > 0.0
            for i in range(p):
                good = good and np.isfinite(design[k, ca, i])
            used[k] = good
            if not good:
                continue
            count += 1
            expected = 0.0
            for i in range(p):
                wa = w * design[k, ca, i]
                right[i] += wa * r
                expected += design[k, ca, i] * shape[i]
                for j in range(p):
                    normal[i, j] += wa * design[k, ca, j]
            known += w * expected * expected
            cross += w * r * expected
        counts[c] = count
        how[c] = unseen
        for i in range(p):
            scale[i] = np.sqrt(normal[i, i]) if normal[i, i] > 0.0 else 1.0
        for i in range(p):
            right[i] /= scale[i]
            for j in range(p):
                normal[i, j] /= scale[i] * scale[j]
                unit[i, j] = normal[i, j]
                inverse[i, j] = 1.0 if i == j else 0.0
        if _solve(unit, inverse, p, least_pivot):
            norm, norm_inverse, negative = 0.0, 0.0, False
            u2 = 0.0
            for i in range(p):
                row, row_inverse, f[i] = 0.0, 0.0, 0.0
                for j in range(p):
                    row += abs(normal[i, j])
                    row_inverse += abs(inverse[i, j])
                    f[i] += inverse[i, j] * right[j]
                    u2 += white[i] * white[j] * inverse[i, j] / (scale[i] * scale[j])
                norm, norm_inverse = max(norm, row), max(norm_inverse, row_inverse)
                negative = negative or f[i] < 0.0
            if negative:
                _not_below_zero(normal, right, p, least_pivot, f)
            misfit = 0.0
            for i in range(p):
                f[i] /= scale[i]
            for k in range(looks):
                if used[k]:
                    gap = rho[k, c]
                    for i in range(p):
                        gap -= design[k, ca, i] * f[i]
                    misfit += weights[k, cw] * gap * gap
            s2 = _scatter(misfit, count - p, least)
            enough = count >= p + spare_looks and norm * norm_inverse <= largest_condition
            if enough and np.sqrt(s2 * max(u2, 0.0)) <= largest_u:
                how[c] = held_at_zero if negative else fitted
                scatter[c] = s2
                for i in range(p):
                    parameters[c, i] = f[i]
                    for j in range(p):
                        covariance[c, i, j] = s2 * inverse[i, j] / (scale[i] * scale[j])
        if how[c] == unseen and has_prior and known > 0.0:
            factor = max(cross / known, 0.0)
            for k in range(looks):
                if used[k]:
                    gap = rho[k, c]
                    for i in range(p):
                        gap -= design[k, ca, i] * shape[i] * factor
                    power += weights[k, cw] * gap * gap
            s2 = _scatter(power, count - 1, least)
            if np.isfinite(s2):
                how[c] = scaled_prior
                scatter[c] = s2
                wide = (factor * shape_u) ** 2 + s2 / known
                for i in range(p):
                    parameters[c, i] = factor * shape[i]
                    for j in range(p):
                        covariance[c, i, j] = wide * shape[i] * shape[j]


def invert(reflectance, weights, design, names=GROUND, prior=None, limits=None, least_scatter=1.0):
    """Same contract as anisotropy.invert."""
    rho, w, a = aligned(reflectance, weights, design, names)
    limits = limits or default_limits()
    cells, p = rho.shape[1:], a.shape[-1]
    # one value per look is kept as one; anything between is spread to a value per cell
    w = w if w[0].size == 1 or w.shape == rho.shape else np.broadcast_to(w, rho.shape)
    a = a if a[0].size == p or a.shape == (*rho.shape, p) else np.broadcast_to(a, (*rho.shape, p))
    rho = rho.reshape(rho.shape[0], -1)
    n = rho.shape[1]
    out = Inversion(
        np.full((n, p), np.nan),
        np.full((n, p, p), np.nan),
        np.full(n, np.nan),
        np.empty(n, np.uint8),
        np.empty(n, np.uint16),
    )
    # arrays that can be written, or the kernel would be compiled once more for those that cannot
    _cells(
        np.require(rho, requirements="CW"),
        np.require(w.reshape(w.shape[0], -1), requirements="CW"),
        np.require(a.reshape(a.shape[0], -1, p), requirements="CW"),
        white_sky_weights(names),
        np.array(prior.parameters) if prior else np.zeros(p),
        float(prior.relative_u) if prior else 0.0,
        prior is not None,
        float(limits.largest_u),
        float(limits.largest_condition),
        int(limits.spare_looks),
        float(least_scatter),
        SINGULAR,
        (UNSEEN, FITTED, HELD_AT_ZERO, SCALED_PRIOR),
        out.parameters,
        out.covariance,
        out.scatter,
        out.how,
        out.looks,
    )
    return Inversion(
        out.parameters.reshape(*cells, p),
        out.covariance.reshape(*cells, p, p),
        out.scatter.reshape(cells),
        out.how.reshape(cells),
        out.looks.reshape(cells),
    )
