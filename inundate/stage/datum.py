"""The offset of a record from the wetland's datum: survey, sensor zero, drift and steps, weighed against field checks."""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import product

import numpy as np

YEAR_NS = 365.25 * 86400e9
# What may be, and how likely before any check is seen. Common practice, no source: most sensors drift by well under
# 1 cm a year, few by several; most surveys and checks are as good as told, few are several times worse.
_SLOPES = ((0.0, 0.60), (0.01, 0.25), (0.05, 0.15))
_WANDER = ((0.0, 0.70), (0.01, 0.20), (0.04, 0.10))
_SURVEY = ((1.0, 0.70), (3.0, 0.20), (10.0, 0.10))
_CHECKS = ((1.0, 0.60), (1.6, 0.25), (3.0, 0.15))


@dataclass(frozen=True, slots=True)
class Step:
    """A sudden change of the record that is not the water's.

    Attributes
    ----------
    time : int
        ns UTC: the record after it stands on another datum.
    size_m : float
        Change of the raw record, m.
    sd_m : float
        How well the record alone sizes it.
    log_odds : float
        For a step here before checks are seen.
    kind : str
        ``jump`` (seen in the record), ``gap`` or ``dry`` (may hide in a hole or a dry spell), ``checks``.
    why : str
        In words.
    """

    time: int
    size_m: float
    sd_m: float
    log_odds: float
    kind: str
    why: str = ""


@dataclass(slots=True)
class Evidence:
    """What is known of a record's offset (metres to be added to it).

    Attributes
    ----------
    time : ndarray of int64, shape (obs,)
        ns UTC.
    offset_m, sd_m : ndarray of float64, shape (obs,)
        Check minus record, or minus the depth that a dry sensor reads.
    zero : ndarray of bool, shape (obs,)
        True for dry-sensor readings: they tell the sensor's zero and drift, not its height.
    span : ndarray of int64, shape (obs,)
        Position of the registry period.
    start : int
        First time of the record, ns.
    height_sd_m : tuple of float
        Survey uncertainty of every registry period.
    sensor_sd_m : float
    """

    time: np.ndarray
    offset_m: np.ndarray
    sd_m: np.ndarray
    zero: np.ndarray
    span: np.ndarray
    start: int
    height_sd_m: tuple[float, ...]
    sensor_sd_m: float

    def take(self, keep: np.ndarray) -> Evidence:
        """Return the evidence at ``keep`` (mask or positions)."""
        return Evidence(
            self.time[keep],
            self.offset_m[keep],
            self.sd_m[keep],
            self.zero[keep],
            self.span[keep],
            self.start,
            self.height_sd_m,
            self.sensor_sd_m,
        )


@dataclass(slots=True)
class Offset:
    """The weighed offset of a record; made by :func:`fit_offset`.

    Attributes
    ----------
    evidence : Evidence
    steps : tuple of Step
    log_evidence : float
        Log likelihood of the evidence, averaged over the models.
    """

    evidence: Evidence
    steps: tuple[Step, ...]
    log_evidence: float
    _models: list[tuple[float, tuple[float, ...], np.ndarray, np.ndarray]] = field(default_factory=list)

    def at(self, time: np.ndarray, span: np.ndarray, *, part: str = "all") -> tuple[np.ndarray, np.ndarray]:
        """Return offset and its standard deviation.

        Parameters
        ----------
        time : ndarray of int64, shape (n,)
            ns UTC.
        span : ndarray of int64, shape (n,)
            Position of the registry period.
        part : {"all", "zero", "height"}
            Everything, the sensor's zero and drift only, or survey and steps only.

        Returns
        -------
        offset_m, sd_m : ndarray of float64, shape (n,)
        """
        e = self.evidence
        mean = np.zeros(time.size)
        second = np.zeros(time.size)
        basis, prior_mean = _basis(time, span, part != "zero", part != "height", e, self.steps)
        seen, _ = _basis(e.time, e.span, ~e.zero, np.ones(e.time.size, bool), e, self.steps)
        years, seen_years = (time - e.start) / YEAR_NS, (e.time - e.start) / YEAR_NS
        for weight, model, inverse, pull in self._models:
            var = _variances(model, e, self.steps)
            cross = (basis * var) @ seen.T
            own = (basis**2) @ var
            if model[1] and part != "height":
                cross += model[1] ** 2 * np.minimum(years[:, None], seen_years[None, :])
                own += model[1] ** 2 * years
            m = basis @ prior_mean + cross @ pull
            v = np.maximum(own - np.einsum("ij,jk,ik->i", cross, inverse, cross, optimize=True), 0.0)
            mean += weight * m
            second += weight * (v + m**2)
        return mean, np.sqrt(np.maximum(second - mean**2, 0.0))

    def sizes(self) -> list[tuple[float, float]]:
        """Return what every step added to the offset (m): mean and standard deviation."""
        e, first = self.evidence, len(self.evidence.height_sd_m) + 2
        seen, prior_mean = _basis(e.time, e.span, ~e.zero, np.ones(e.time.size, bool), e, self.steps)
        out = []
        for i in range(first, first + len(self.steps)):
            mean = second = 0.0
            for weight, model, inverse, pull in self._models:
                var = _variances(model, e, self.steps)[i]
                m = float(prior_mean[i] + var * (seen[:, i] @ pull))
                v = max(float(var - var**2 * (seen[:, i] @ inverse @ seen[:, i])), 0.0)
                mean, second = mean + weight * m, second + weight * (v + m**2)
            out.append((mean, float(np.sqrt(max(second - mean**2, 0.0)))))
        return out


def _basis(
    time: np.ndarray,
    span: np.ndarray,
    height: np.ndarray | bool,
    zero: np.ndarray | bool,
    e: Evidence,
    steps: tuple[Step, ...],
) -> tuple[np.ndarray, np.ndarray]:
    """Columns: survey error of every period, sensor zero, slope, steps; and their prior means."""
    n, k = time.size, len(e.height_sd_m)
    out = np.zeros((n, k + 2 + len(steps)))
    height, zero = np.broadcast_to(height, n), np.broadcast_to(zero, n)
    out[np.arange(n), span] = height
    out[:, k] = zero
    out[:, k + 1] = zero * (time - e.start) / YEAR_NS
    for i, step in enumerate(steps):
        out[:, k + 2 + i] = height & (time >= step.time)
    return out, np.r_[np.zeros(k + 2), [-s.size_m for s in steps]]


def _variances(model: tuple[float, ...], e: Evidence, steps: tuple[Step, ...]) -> np.ndarray:
    slope, _, survey, _ = model
    return np.r_[[(survey * s) ** 2 for s in e.height_sd_m], e.sensor_sd_m**2, slope**2, [s.sd_m**2 for s in steps]]


def fit_offset(evidence: Evidence, steps: tuple[Step, ...] = ()) -> Offset:
    """Weigh survey, sensor accuracy, drift and given steps against the evidence.

    The offset is a Gaussian process: a constant (survey error of the period, sensor zero), a linear drift, a random
    walk (which runs straight from check to check), and the steps. Models with and without drift and wandering, with
    survey and checks as good as told or worse, are averaged by their posterior weights, so a drift is taken off only
    as far as the checks demand it beyond their own uncertainty.

    Parameters
    ----------
    evidence : Evidence
        May be empty: the prior then speaks alone.
    steps : tuple of Step

    Returns
    -------
    Offset

    References
    ----------
    Rasmussen, C. E., Williams, C. K. I. (2006). Gaussian Processes for Machine Learning, ch. 2 (eqs 2.23-2.30).
    Hoeting, J. A. et al. (1999). Bayesian model averaging: a tutorial. Statistical Science 14, 382-417.
    """
    e = evidence
    seen, prior_mean = _basis(e.time, e.span, ~e.zero, np.ones(e.time.size, bool), e, steps)
    years = (e.time - e.start) / YEAR_NS
    shared = np.minimum(years[:, None], years[None, :])
    residual = e.offset_m - seen @ prior_mean
    found = []
    for slope, wander, survey, worse in product(_SLOPES, _WANDER, _SURVEY, _CHECKS):
        model = (slope[0], wander[0], survey[0], worse[0])
        noise = np.where(e.zero, e.sd_m, e.sd_m * worse[0])
        cov = (seen * _variances(model, e, steps)) @ seen.T + wander[0] ** 2 * shared + np.diag(noise**2)
        inverse = np.linalg.inv(cov) if e.time.size else np.zeros((0, 0))
        pull = inverse @ residual
        size = np.linalg.slogdet(cov)[1] if e.time.size else 0.0
        log = -0.5 * (residual @ pull + size + e.time.size * np.log(2 * np.pi))
        found.append((log + np.log(slope[1] * wander[1] * survey[1] * worse[1]), model, inverse, pull))
    top = max(f[0] for f in found)
    weights = np.exp([f[0] - top for f in found])
    log_evidence = float(top + np.log(weights.sum()))
    weights /= weights.sum()
    kept = [(w, *f[1:]) for w, f in zip(weights, found, strict=True) if w > 2e-3]
    total = sum(k[0] for k in kept)
    return Offset(e, steps, log_evidence, [(k[0] / total, *k[1:]) for k in kept])


def choose_steps(evidence: Evidence, candidates: list[Step], most: int = 6) -> Offset:
    """Accept the steps that record and checks together make likelier than not, best first.

    Parameters
    ----------
    evidence : Evidence
    candidates : list of Step
    most : int
        Most steps accepted.

    Returns
    -------
    Offset
    """
    current = fit_offset(evidence)
    left = list(candidates)
    for _ in range(most):
        best: tuple[float, Offset, Step] | None = None
        for step in left:
            tried = fit_offset(evidence, tuple(sorted((*current.steps, step), key=lambda s: s.time)))
            gain = tried.log_evidence - current.log_evidence + step.log_odds
            if gain > 0 and (best is None or gain > best[0]):
                best = (gain, tried, step)
        if best is None:
            break
        current = best[1]
        left = [s for s in left if abs(s.time - best[2].time) > 86400e9 / 2]
    return current


def doubtful_checks(evidence: Evidence, steps: tuple[Step, ...], limit: float = 4.5) -> np.ndarray:
    """Return positions of checks that the rest contradict (left-out residual over ``limit`` sd), worst first.

    Never more than a fifth of the checks, and none where there are fewer than four.
    """
    out: list[int] = []
    keep = np.arange(evidence.time.size)
    checks = int((~evidence.zero).sum())
    while checks >= 4 and len(out) < checks // 5 + (checks < 5):
        scores = np.zeros(keep.size)
        for i in range(keep.size):
            if evidence.zero[keep[i]]:
                continue
            rest = fit_offset(evidence.take(np.delete(keep, i)), steps)
            one = evidence.take(keep[i : i + 1])
            mean, sd = rest.at(one.time, one.span)
            scores[i] = abs(one.offset_m[0] - mean[0]) / np.hypot(sd[0], one.sd_m[0])
        worst = int(np.argmax(scores))
        if scores[worst] <= limit:
            break
        out.append(int(keep[worst]))
        keep = np.delete(keep, worst)
    return np.array(out, int)
