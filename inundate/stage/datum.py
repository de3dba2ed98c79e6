"""The offset of a record from the wetland's datum: survey, sensor zero, drift and steps, weighed against field checks."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import reduce
from itertools import product

import numpy as np

from inundate.stage.mixture import stated_sd

YEAR_NS = 365.25 * 86400e9
#: What may be: sd of a linear drift and of a random walk (m a year); errors of survey, checks and sensor zero as multiples
#: of what is told: they may be worse, but never better, than somebody says. (A dry sensor tells its zero and so how good
#: the sensor is, but nothing of the survey; so each has a multiple of its own.)
_SLOPES = np.array([0.0, 0.01, 0.05])
_WANDER = np.array([0.0, 0.01, 0.04])
_SURVEY = np.array([1.0, 3.0, 10.0])
_CHECKS = np.array([1.0, 1.6, 3.0])
_SENSOR = np.array([1.0, 4.0])
_MODELS = np.array(list(product(_SLOPES, _WANDER, _SURVEY, _CHECKS, _SENSOR)))


@dataclass(frozen=True, slots=True)
class Priors:
    """How likely each kind of error is before a logger's checks are seen.

    Attributes
    ----------
    slope, wander, survey, checks, sensor : tuple of float
        Weights that sum to one. The defaults are common practice, no source: most sensors drift by less than 1 cm a year
        (0.1 % of a 10 m range), one in twenty by several; most surveys and checks are as good as told, one in
        twenty surveys is three times worse and one in a hundred grossly wrong.
    zero_sd_m : float
        How well a dry sensor tells its zero under water, besides the scatter of its readings.
    """

    slope: tuple[float, ...] = (0.60, 0.35, 0.05)
    wander: tuple[float, ...] = (0.75, 0.20, 0.05)
    survey: tuple[float, ...] = (0.94, 0.05, 0.01)
    checks: tuple[float, ...] = (0.60, 0.25, 0.15)
    sensor: tuple[float, ...] = (0.85, 0.15)
    zero_sd_m: float = 0.003

    def log_weights(self) -> np.ndarray:
        """Return log weights of all models, shape (model,)."""
        return reduce(np.add.outer, [np.log(np.array(p)) for p in self._axes()]).ravel()

    def _axes(self) -> tuple[tuple[float, ...], ...]:
        return self.slope, self.wander, self.survey, self.checks, self.sensor

    def learn(self, offsets: list[Offset], strength: float = 2.0) -> Priors:
        """Return the weights that the loggers of an area show, the present ones counting as ``strength`` loggers.

        Empirical Bayes by expectation-maximisation over the models' likelihoods; loggers with fewer than three checks
        say nothing.

        Parameters
        ----------
        offsets : list of Offset
            Fitted with these priors.
        strength : float

        Returns
        -------
        Priors
        """
        told = [o.weights for o in offsets if (~o.evidence.zero).sum() >= 3]
        if not told:
            return self
        axes = self._axes()
        shape = tuple(len(a) for a in axes)
        likelihood = np.array(told) / np.exp(self.log_weights())
        new = self
        for _ in range(50):
            weights = likelihood * np.exp(new.log_weights())
            share = (weights / weights.sum(axis=1, keepdims=True)).sum(axis=0).reshape(shape)
            counts = [
                strength * np.array(own) + share.sum(axis=tuple(i for i in range(len(axes)) if i != axis))
                for axis, own in enumerate(axes)
            ]
            slope, wander, survey, checks, sensor = (tuple((count / count.sum()).tolist()) for count in counts)
            new = Priors(slope, wander, survey, checks, sensor, self.zero_sd_m)
        return replace(new, zero_sd_m=self._learn_zero(offsets))

    def _learn_zero(self, offsets: list[Offset]) -> float:
        """Scatter of dry readings about the fitted zero, over all loggers with several dry spells."""
        rest = []
        for offset in offsets:
            e = offset.evidence
            if e.zero.sum() >= 3:
                rest.append((e.offset_m - offset.at(e.time, e.span, part="zero")[0])[e.zero])
        if sum(r.size for r in rest) < 8:
            return self.zero_sd_m
        # each logger's own zero took a degree of freedom
        square = sum(float(r @ r) for r in rest) / sum(r.size - 1 for r in rest)
        return float(np.clip(np.sqrt(square), 0.001, 0.01))


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
    odds : ndarray of float64, shape (obs,)
        Log odds that a zero reading is one (a flat spell of shallow water looks alike); 0 for checks.
    """

    time: np.ndarray
    offset_m: np.ndarray
    sd_m: np.ndarray
    zero: np.ndarray
    span: np.ndarray
    start: int
    height_sd_m: tuple[float, ...]
    sensor_sd_m: float
    odds: np.ndarray

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
            self.odds[keep],
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
    weights : ndarray of float64, shape (model,)
        Posterior weights of the models.
    log_terms : ndarray of float64, shape (model,)
        Log of prior weight times likelihood of every model.
    inverse, pull : ndarray of float64, shapes (model, obs, obs) and (model, obs)
        Inverse covariance of the evidence, and that times its residual.
    """

    evidence: Evidence
    steps: tuple[Step, ...]
    log_evidence: float
    weights: np.ndarray = field(default_factory=lambda: np.empty(0))
    log_terms: np.ndarray = field(default_factory=lambda: np.empty(0))
    inverse: np.ndarray = field(default_factory=lambda: np.empty((0, 0, 0)))
    pull: np.ndarray = field(default_factory=lambda: np.empty((0, 0)))

    def _leading(self) -> list[tuple[float, np.ndarray, np.ndarray, np.ndarray]]:
        """Weight, model, inverse covariance and pull of the models that matter."""
        keep = np.flatnonzero(self.weights > 2e-3)
        total = self.weights[keep].sum()
        return [(float(self.weights[k] / total), _MODELS[k], self.inverse[k], self.pull[k]) for k in keep]

    def at(self, time: np.ndarray, span: np.ndarray, *, part: str = "all") -> tuple[np.ndarray, np.ndarray]:
        """Return offset and its standard deviation (``mixture.stated_sd`` over the models).

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
        basis, prior_mean = _basis(time, span, part != "zero", part != "height", e, self.steps)
        seen, _ = _basis(e.time, e.span, ~e.zero, np.ones(e.time.size, bool), e, self.steps)
        years, seen_years = (time - e.start) / YEAR_NS, (e.time - e.start) / YEAR_NS
        leading = self._leading()
        means, sds = np.empty((len(leading), time.size)), np.empty((len(leading), time.size))
        for i, (_, model, inverse, pull) in enumerate(leading):
            var = _variances(model, e, self.steps)
            cross = (basis * var) @ seen.T
            own = (basis**2) @ var
            if model[1] and part != "height":
                cross += model[1] ** 2 * np.minimum(years[:, None], seen_years[None, :])
                own += model[1] ** 2 * years
            means[i] = basis @ prior_mean + cross @ pull
            sds[i] = np.sqrt(np.maximum(own - ((cross @ inverse) * cross).sum(axis=1), 0.0))
        return stated_sd(np.array([weight for weight, *_ in leading]), means, sds)

    def sizes(self) -> list[tuple[float, float]]:
        """Return what every step added to the offset (m): mean and standard deviation."""
        e, first = self.evidence, len(self.evidence.height_sd_m) + 2
        seen, prior_mean = _basis(e.time, e.span, ~e.zero, np.ones(e.time.size, bool), e, self.steps)
        leading = self._leading()
        means, sds = np.empty((len(leading), len(self.steps))), np.empty((len(leading), len(self.steps)))
        for k, (_, model, inverse, pull) in enumerate(leading):
            var = _variances(model, e, self.steps)[first:]
            column = seen[:, first:]
            means[k] = prior_mean[first:] + var * (pull @ column)
            sds[k] = np.sqrt(np.maximum(var - var**2 * ((inverse @ column) * column).sum(axis=0), 0.0))
        mean, sd = stated_sd(np.array([weight for weight, *_ in leading]), means, sds)
        return list(zip(mean.tolist(), sd.tolist(), strict=True))


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


def _variances(model: np.ndarray, e: Evidence, steps: tuple[Step, ...]) -> np.ndarray:
    """Prior variances of the columns: shape (column,), or (model, column) for several models."""
    slope, survey, sensor = model[..., 0, None], model[..., 2, None], model[..., 4, None]
    known = np.ones((*model.shape[:-1], 1))
    return np.concatenate(
        [
            (survey * np.array(e.height_sd_m)) ** 2,
            (sensor * e.sensor_sd_m) ** 2,
            slope**2,
            known * np.array([s.sd_m**2 for s in steps]),
        ],
        axis=-1,
    )


def fit_offset(evidence: Evidence, steps: tuple[Step, ...] = (), priors: Priors | None = None) -> Offset:
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
    priors : Priors, optional

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
    noise = np.where(e.zero, e.sd_m, e.sd_m * _MODELS[:, 3, None])
    cov = (seen * _variances(_MODELS, e, steps)[:, None, :]) @ seen.T
    cov += _MODELS[:, 1, None, None] ** 2 * shared
    cov[:, np.arange(e.time.size), np.arange(e.time.size)] += noise**2
    inverse = np.linalg.inv(cov)
    pull = inverse @ residual
    log = -0.5 * (pull @ residual + np.linalg.slogdet(cov)[1] + e.time.size * np.log(2 * np.pi))
    log += (priors or Priors()).log_weights()
    weights = np.exp(log - log.max())
    return Offset(e, steps, log_sum(log), weights / weights.sum(), log, inverse, pull)


def log_sum(log: np.ndarray) -> float:
    """Return the log of a sum of exponentials."""
    top = float(log.max())
    return top + float(np.log(np.exp(log - top).sum()))
