"""Which steps, checks and zero readings to believe."""

from __future__ import annotations

import numpy as np

from inundate.stage.datum import Evidence, Offset, Priors, Step, fit_offset, log_sum


def evidence_with(current: Offset, step: Step) -> float:
    """Log evidence with one more step, by a rank-one update of every model (matrix determinant lemma)."""
    e = current.evidence
    column = (~e.zero & (e.time >= step.time)).astype(float)
    q = (current.inverse @ column) @ column
    pulled = current.pull @ column
    grown = 1.0 + step.sd_m**2 * q
    # the step's expected size moves the residual along the column, its sd widens the covariance
    quad = 2.0 * step.size_m * pulled + step.size_m**2 * q
    quad -= step.sd_m**2 * (pulled + step.size_m * q) ** 2 / grown
    return log_sum(current.log_terms - 0.5 * (quad + np.log(grown)))


def choose_steps(evidence: Evidence, candidates: list[Step], priors: Priors | None = None, most: int = 6) -> Offset:
    """Accept the steps that record and checks together make likelier than not, best first.

    Parameters
    ----------
    evidence : Evidence
    candidates : list of Step
    priors : Priors, optional
    most : int
        Most steps accepted.

    Returns
    -------
    Offset
    """
    current = fit_offset(evidence, (), priors)
    left = list(candidates)
    while left and len(current.steps) < most:
        gains = [evidence_with(current, s) - current.log_evidence + s.log_odds for s in left]
        best = int(np.argmax(gains))
        if gains[best] <= 0:
            break
        taken = left[best]
        current = fit_offset(evidence, tuple(sorted((*current.steps, taken), key=lambda s: s.time)), priors)
        left = [s for s in left if abs(s.time - taken.time) > 86400e9 / 2]
    return current


def false_zeros(offset: Offset, priors: Priors | None = None) -> np.ndarray:
    """Return positions of zero readings that are likelier shallow water: the rest foretells another zero.

    A true one has the density that the rest gives it, a false one any value within 15 cm alike; weighed by the odds
    of each.

    Parameters
    ----------
    offset : Offset
    priors : Priors, optional

    Returns
    -------
    ndarray of int64
    """
    keep = np.arange(offset.evidence.time.size)
    out: list[int] = []
    current = offset
    while current.evidence.zero.any():
        e = current.evidence
        # what is lost without a piece of evidence, from the inverse covariance (Rasmussen & Williams 2006, eq. 5.12)
        own = np.diagonal(current.inverse, axis1=1, axis2=2)
        told = 0.5 * (np.log(own / (2 * np.pi)) - current.pull**2 / own)
        scores = np.full(e.time.size, np.inf)
        for i in np.flatnonzero(e.zero):
            without = log_sum(current.log_terms - told[:, i])
            scores[i] = current.log_evidence - without + np.log(0.15) + e.odds[i]
        worst = int(np.argmin(scores))
        if scores[worst] >= 0:
            break
        out.append(int(keep[worst]))
        keep = np.delete(keep, worst)
        current = fit_offset(e.take(np.delete(np.arange(e.time.size), worst)), current.steps, priors)
    return np.array(out, int)


def doubtful_evidence(offset: Offset, limit: float = 4.5) -> np.ndarray:
    """Return positions of checks that the rest contradicts (left-out residual over ``limit`` sd), worst first.

    Never more than a fifth of the evidence (one of four to nine), and none where there are fewer than four pieces. Left-out residuals
    come from the inverse covariance (Rasmussen & Williams 2006, eq. 5.12).

    Parameters
    ----------
    offset : Offset
    limit : float

    Returns
    -------
    ndarray of int64
    """
    evidence = offset.evidence
    out: list[int] = []
    keep = np.arange(evidence.time.size)
    while evidence.time.size >= 4 and len(out) < max(evidence.time.size // 5, 1):
        rest = fit_offset(evidence.take(keep), offset.steps) if out else offset
        top = int(np.argmax(rest.weights))
        scores = np.abs(rest.pull[top]) / np.sqrt(np.diagonal(rest.inverse[top]))
        scores[evidence.zero[keep]] = 0.0
        worst = int(np.argmax(scores))
        if scores[worst] <= limit:
            break
        out.append(int(keep[worst]))
        keep = np.delete(keep, worst)
    return np.array(out, int)
