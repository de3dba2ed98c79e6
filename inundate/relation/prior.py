"""Partial pooling: what all wetlands together say of one wetland's curve before its own pairs speak.

Parameters of a family are taken as normal about a linear function of size, cover and elevation; mean and spread are learnt
by expectation-maximisation on each wetland's Gaussian likelihood (empirical Bayes; Dempster, Laird & Rubin 1977, JRSS B 39,
1; Morris 1983, JASA 78, 47).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from inundate.relation.families import ELEVATION, FAMILY_SIZE, N_PARAM, POWER, POWER_OFFSET, SPLINE
from inundate.relation.pairs import Units

# Wide defaults, used alone when there is nothing to learn from. log b: centre 2/p with p = 1.72, published for prairie
# wetlands under 1 ha; the spread spans the published medians 0.91 (beaver ponds) to 3.3 (larger prairie wetlands). Depth,
# offset, knots and elevation errors: common practice, no source.
DEFAULT_SD = {
    POWER: np.array([0.8, 0.5]),
    POWER_OFFSET: np.array([0.8, 0.5, 0.08]),
    SPLINE: np.array([0.8, 0.5, 0.08, 0.4, 0.4, 0.4, 0.4]),
    ELEVATION: np.array([0.15, 0.06, 0.5]),
}
# Spread that the learnt prior is drawn towards, as a share of the default's: wetlands of one landscape are more alike.
_SHRINK = {
    POWER: np.array([0.4, 0.4]),
    POWER_OFFSET: np.array([0.4, 0.4, 0.5]),
    SPLINE: np.array([0.4, 0.4, 0.5, 0.7, 0.7, 0.7, 0.7]),
    ELEVATION: np.array([0.4, 0.4, 0.6]),
}
LEAST_PAIRS = 4


@dataclass(frozen=True, slots=True)
class Prior:
    """Gaussian prior of one family: ``mean`` (unit, N_PARAM), ``cov`` and ``precision`` (unit, N_PARAM, N_PARAM)."""

    mean: np.ndarray
    cov: np.ndarray
    precision: np.ndarray


def _pack(family: int, mean: np.ndarray, cov: np.ndarray) -> Prior:
    size = int(FAMILY_SIZE[family])
    units = mean.shape[0]
    full_mean = np.zeros((units, N_PARAM))
    full_mean[:, :size] = mean
    full_cov = np.zeros((units, N_PARAM, N_PARAM))
    full_cov[:, :size, :size] = cov
    precision = np.zeros((units, N_PARAM, N_PARAM))
    precision[:, :size, :size] = np.linalg.inv(cov)
    return Prior(full_mean, full_cov, precision)


def shape_of_hypsometry(stage_m: np.ndarray, share: np.ndarray) -> tuple[float, float]:
    """Return log full stage and log b of the power law nearest to a hypsometry between 10 % and 95 % of its area."""
    inside = (share > 0.1) & (share < 0.95) & (stage_m > 0)
    if inside.sum() < 3:
        return float(np.log(max(stage_m[-1], 0.05))), 0.0
    x, y = np.log(stage_m[inside]), np.log(share[inside])
    slope = np.clip(np.sum((x - x.mean()) * (y - y.mean())) / max(np.sum((x - x.mean()) ** 2), 1e-9), 0.2, 5.0)
    return float(x.mean() - y.mean() / slope), float(np.log(slope))


def base_means(units: Units) -> dict[int, np.ndarray]:
    """Return the default prior means of every family, each (unit, family size)."""
    table = units.table
    size = table["area_max_m2"].to_numpy(float)
    log_full = np.log(0.7) + 0.15 * np.log(size / 2000.0)
    log_b = np.full(size.size, np.log(2.0 / 1.72))
    for i, (key, (stage, share)) in enumerate(units.hypsometry.items()):
        mine = (table["wetland_id"] == key).to_numpy()
        log_full[mine], log_b[mine] = shape_of_hypsometry(stage + units.spans[i, 3], share)
    out = {}
    for family in (POWER, POWER_OFFSET, SPLINE):
        mean = np.zeros((size.size, int(FAMILY_SIZE[family])))
        mean[:, 0], mean[:, 1] = log_full, log_b
        out[family] = mean
    out[ELEVATION] = np.zeros((size.size, 3))
    out[ELEVATION][:, 2] = np.log(1.6)
    return out


def survey_depth(units: Units) -> np.ndarray:
    """Return the depth of water (m, (unit,)) that hid each bowl's lowest ground when its elevation was measured."""
    which = units.table["hypsometry"].to_numpy()
    return np.where(which >= 0, units.spans[np.maximum(which, 0), 4], 0.0)


def _hidden(family: int, units: Units, d: int) -> np.ndarray:
    """Return the extra prior variance (unit, d, d) where water hid the lowest ground: half the depth found, on the offset."""
    out = np.zeros((units.table.shape[0], d, d))
    if family == ELEVATION:
        out[:, 0, 0] = (0.5 * survey_depth(units)) ** 2
    return out


def default_prior(family: int, units: Units) -> Prior:
    """Return the wide prior that holds without any other wetland."""
    mean = base_means(units)[family]
    sd = np.repeat(DEFAULT_SD[family][None], mean.shape[0], axis=0)
    known = units.table["hypsometry"].to_numpy() >= 0
    if family != ELEVATION:
        sd[known, 0] *= 0.6
    d = mean.shape[1]
    return _pack(family, mean, sd[:, :, None] * sd[:, None, :] * np.eye(d) + _hidden(family, units, d))


def features(units: Units) -> np.ndarray:
    """Return what the prior may lean on, (unit, 6): 1, log size, deciduous, evergreen, log depth and log b of elevation."""
    table = units.table
    size = np.log(table["area_max_m2"].to_numpy(float) / 2000.0)
    base = base_means(units)[POWER]
    known = table["hypsometry"].to_numpy() >= 0
    depth = np.where(known, base[:, 0] - np.log(0.7), 0.0)
    shape = np.where(known, base[:, 1], 0.0)
    cover = table["cover"].to_numpy(str)
    return np.column_stack([np.ones(size.size), size, cover == "deciduous", cover == "evergreen", depth, shape]).astype(
        float
    )


def _columns(family: int, parameter: int) -> np.ndarray:
    if family == ELEVATION:
        return np.array([0, 1, 2, 3]) if parameter < 2 else np.array([0])
    return np.array([0, 1, 2, 3, 4, 5]) if parameter < 2 else np.array([0])


_WORST = 1e12
"""Condition of a spread beyond which it is no longer told apart in double precision."""


def learn_prior(
    family: int, units: Units, prior: Prior, theta: np.ndarray, info: np.ndarray, without: np.ndarray | None = None
) -> Prior:
    """Learn the prior of a family from the fits of all units.

    Parameters
    ----------
    family : int
    units : Units
    prior : Prior
        The prior under which ``theta`` was fitted.
    theta : ndarray, shape (unit, N_PARAM); info : ndarray, shape (unit, N_PARAM, N_PARAM)
        Fitted parameters and the information of the pairs alone.
    without : ndarray of bool, shape (unit,), optional
        Units to leave out of the learning.

    Returns
    -------
    Prior
        For every unit, also those without pairs; its spread includes what remains unknown of the mean.
    """
    d = int(FAMILY_SIZE[family])
    base = base_means(units)[family]
    x = features(units)
    told = units.table["n_pairs"].to_numpy() >= LEAST_PAIRS
    if without is not None:
        told &= ~without
    if family == ELEVATION:
        told &= (units.table["hypsometry"].to_numpy() >= 0) & (survey_depth(units) < 0.1)
    scatter = np.diag((DEFAULT_SD[family] * _SHRINK[family]) ** 2)
    own = info[told][:, :d, :d]
    before = prior.precision[told][:, :d, :d]
    lean = np.einsum("uij,uj->ui", own + before, theta[told][:, :d]) - np.einsum(
        "uij,uj->ui", before, prior.mean[told][:, :d]
    )
    lean -= np.einsum("uij,uj->ui", own, base[told])
    coef, sigma, spread = _expectation_maximisation(family, x[told], own, lean, scatter)
    mean = base + x @ coef
    cov = np.repeat(sigma[None], x.shape[0], axis=0)
    for j in range(d):
        use = _columns(family, j)
        cov[:, j, j] += np.einsum("ua,ab,ub->u", x[:, use], spread[j], x[:, use])
    cov += _hidden(family, units, d)
    return _pack(family, mean, cov)


def _expectation_maximisation(
    family: int, x: np.ndarray, own: np.ndarray, lean: np.ndarray, scatter: np.ndarray
) -> tuple[np.ndarray, np.ndarray, list[np.ndarray]]:
    d = scatter.shape[0]
    coef = np.zeros((6, d))
    sigma = np.diag(DEFAULT_SD[family] ** 2)
    weight = d + 1.0
    # sd of the coefficients before seeing data: the intercept may move as far as the default prior's sd, the others less
    loose = np.array([1.0, 0.2, 0.4, 0.4, 0.5, 0.5])
    spread = [np.diag((loose[_columns(family, j)] * DEFAULT_SD[family][j]) ** 2) for j in range(d)]
    if x.shape[0] < 3:
        return coef, sigma, [0.0 * one for one in spread]
    own = _no_less_than_nothing(own)
    for _ in range(80):
        hold = np.linalg.inv(sigma)
        cov = np.linalg.inv(own + hold)
        mean = np.einsum("uij,uj->ui", cov, lean + (x @ coef) @ hold)
        for j in range(d):
            use = _columns(family, j)
            before = np.diag(1.0 / (loose[use] * DEFAULT_SD[family][j]) ** 2)
            spread[j] = np.linalg.inv(x[:, use].T @ x[:, use] / sigma[j, j] + before)
            coef[use, j] = spread[j] @ (x[:, use].T @ mean[:, j]) / sigma[j, j]
        gap = mean - x @ coef
        wider = (gap.T @ gap + cov.sum(axis=0) + weight * scatter) / (x.shape[0] + weight)
        if not (np.isfinite(wider).all() and np.linalg.cond(wider) < _WORST):
            break
        sigma = 0.5 * (wider + wider.T)
    return coef, sigma, spread


def _no_less_than_nothing(info: np.ndarray) -> np.ndarray:
    """Return information matrices (wetland, parameter, parameter) without directions of negative information.

    A fit that ended on a ridge can have one; taken as it is, it would make a wetland's spread negative.
    """
    value, axis = np.linalg.eigh(0.5 * (info + info.transpose(0, 2, 1)))
    return np.einsum("uij,uj,ukj->uik", axis, np.maximum(value, 0.0), axis)
