"""Measures of skill against published formulas and hand-checked values.

Each test names its source. The numbers of the worked examples follow from the published formulas; they were computed
independently of this package (by hand or with other libraries) and are given to their printed digits.
"""

import numpy as np
import pytest
from sklearn import metrics

from inundate.skill import area_measures, interval_measures, probability_measures, wet_dry_measures

OBSERVED = np.array([10, 12, 15, 20, 18, 14, 11, 9, 8, 10.0])
SIMULATED = np.array([11, 13, 14, 18, 19, 15, 12, 8, 9, 10.0])


def measured(simulated: np.ndarray) -> dict:
    return area_measures(simulated, OBSERVED, np.ones(OBSERVED.size))


def test_nash_sutcliffe_efficiency():
    """Nash & Sutcliffe 1970 (J. Hydrol. 10, 282): 1 - sum (o - s)^2 / sum (o - mean o)^2; 0 for the mean as forecast."""
    assert measured(SIMULATED)["nse"] == pytest.approx(0.9155524279, abs=5e-11)
    benchmark = np.full(OBSERVED.size, OBSERVED.mean()) + np.tile([1e-9, -1e-9], 5)
    assert measured(benchmark)["nse"] == pytest.approx(0.0, abs=1e-8)


def test_kling_gupta_efficiency():
    """Gupta et al. 2009 (J. Hydrol. 377, 80): 1 - sqrt((r - 1)^2 + (sd ratio - 1)^2 + (mean ratio - 1)^2)."""
    found = measured(SIMULATED)
    assert found["kge"] == pytest.approx(0.9108336591, abs=5e-11)
    assert found["r"] == pytest.approx(0.9590143116, abs=5e-11)


def test_percent_bias_and_root_mean_square():
    """Moriasi et al. 2007 (Trans. ASABE 50, 885): 100 sum (o - s) / sum o, negative where too much is simulated."""
    found = measured(SIMULATED)
    assert found["pbias"] == pytest.approx(-1.5748031496, abs=5e-11)
    assert found["rmse"] == pytest.approx(1.0954451150, abs=5e-11)
    assert found["bias"] == pytest.approx(0.2, abs=1e-12)


@pytest.mark.parametrize(
    ("value", "level", "score"), [(5.0, 0.9, 6.0), (1.0, 0.9, 26.0), (9.5, 0.9, 36.0), (9.5, 0.8, 21.0)]
)
def test_interval_score(value, level, score):
    """Gneiting & Raftery 2007 (JASA 102, 359), eq. 43: width plus 2/alpha times the distance outside; interval 2 to 8."""
    found = interval_measures(np.array([2.0]), np.array([8.0]), np.array([value]), np.ones(1), level)
    assert found["interval_score"] == pytest.approx(score, abs=1e-10)
    assert found["coverage"] == float(2.0 <= value <= 8.0)


@pytest.mark.parametrize(
    ("mean", "sd", "value", "crps"),
    [(0, 1, 0, 0.2336949773), (0, 1, 1, 0.6024413576), (0, 1, 2, 1.4527918217), (10, 2, 13, 1.9888480080)],
)
def test_crps_of_a_normal(mean, sd, value, crps):
    """Gneiting & Raftery 2007: sd (z (2 Phi(z) - 1) + 2 phi(z) - 1 / sqrt(pi))."""
    found = probability_measures(np.array([mean]), np.array([sd]), np.array([value]), np.ones(1))
    assert found["crps"] == pytest.approx(crps, abs=5e-11)


def test_crps_is_the_integral_that_defines_it():
    """Gneiting & Raftery 2007, eq. 20: the integral of (F(x) - 1[x >= value])^2."""
    from scipy.integrate import quad
    from scipy.stats import norm

    low = quad(lambda x: norm.cdf(x, 10, 2) ** 2, -30, 13)[0]
    high = quad(lambda x: norm.sf(x, 10, 2) ** 2, 13, 50)[0]
    found = probability_measures(np.array([10.0]), np.array([2.0]), np.array([13.0]), np.ones(1))
    assert found["crps"] == pytest.approx(low + high, rel=1e-8)


TABLES = [
    (
        (90, 10, 20, 380),
        {"accuracy": 0.94, "kappa": 0.8192771084, "mcc": 0.8207677343, "omission": 0.1818181818, "commission": 0.1},
    ),
    ((20, 5, 10, 15), {"accuracy": 0.70, "kappa": 0.4, "mcc": 0.4082482905, "omission": 1 / 3, "commission": 0.2}),
]


@pytest.mark.parametrize(("counts", "expected"), TABLES)
def test_confusion_measures(counts, expected):
    """Cohen 1960 (kappa), Matthews 1975 (MCC), omission FN / (TP + FN) and commission FP / (TP + FP)."""
    tp, fp, fn, tn = counts
    known = np.repeat([True, False, True, False], [tp, fp, fn, tn])
    seen = np.repeat([True, True, False, False], [tp, fp, fn, tn])
    found = wet_dry_measures(known, seen)
    assert [found[k] for k in ("both_wet", "only_seen", "only_known", "both_dry")] == [tp, fp, fn, tn]
    for name, value in expected.items():
        assert found[name] == pytest.approx(value, abs=5e-11), name


def test_kappa_of_a_published_four_class_table():
    """Counts of Olofsson et al. 2014 (Remote Sens. Environ. 148, 42), Table 8, joined to wet (first class) and the rest.

    The joined table is 66, 9, 3, 562; kappa = (po - pe) / (1 - pe) by hand from its margins.
    """
    tp, fp, fn, tn = 66, 9, 3, 562
    n = tp + fp + fn + tn
    chance = ((tp + fp) * (tp + fn) + (fn + tn) * (fp + tn)) / n**2
    by_hand = ((tp + tn) / n - chance) / (1 - chance)
    known = np.repeat([True, False, True, False], [tp, fp, fn, tn])
    seen = np.repeat([True, True, False, False], [tp, fp, fn, tn])
    assert wet_dry_measures(known, seen)["kappa"] == pytest.approx(by_hand, abs=1e-12)
    assert metrics.cohen_kappa_score(known, seen) == pytest.approx(by_hand, abs=1e-12)


@pytest.mark.parametrize(
    ("counts", "f1", "iou", "quantity", "allocation"),
    [((90, 10, 20, 380), 0.8571428571, 0.75, 0.02, 0.04), ((20, 5, 10, 15), 0.7272727273, 0.5714285714, 0.10, 0.20)],
)
def test_overlap_and_disagreement(counts, f1, iou, quantity, allocation):
    """Pontius & Millones 2011 (IJRS 32, 4407): quantity |FP - FN| / n, allocation 2 min(FP, FN) / n; their sum is 1 - accuracy."""
    tp, fp, fn, tn = counts
    known = np.repeat([True, False, True, False], [tp, fp, fn, tn])
    seen = np.repeat([True, True, False, False], [tp, fp, fn, tn])
    found = wet_dry_measures(known, seen)
    assert found["f1"] == pytest.approx(f1, abs=5e-11)
    assert found["iou"] == pytest.approx(iou, abs=5e-11)
    assert found["quantity"] == pytest.approx(quantity, abs=1e-12)
    assert found["allocation"] == pytest.approx(allocation, abs=1e-12)
    assert found["quantity"] + found["allocation"] == pytest.approx(1 - found["accuracy"])


def test_design_based_accuracy_by_hand():
    """Olofsson et al. 2014, stratified estimators, worked by hand for two classes.

    Labels: map water 45 right 5 wrong, map dry 10 wrong 90 right; water maps 20 % of the area. User of water 0.9; overall
    0.2 * 0.9 + 0.8 * 0.9 = 0.9; water's area 0.2 * 0.9 + 0.8 * 0.1 = 0.26; producer of water 0.18 / 0.26.
    Half-width of the overall: 1.96 sqrt(0.04 * 0.09 / 49 + 0.64 * 0.09 / 99).
    """
    import pandas as pd

    from inundate.skill import SkillInputs
    from inundate.skill.scoring import design_based

    row = {"stratum": "all", "leaf_state": "all", "n_water": 55, "n_dry": 95, "omission": 10 / 55, "commission": 5 / 50}
    none = pd.DataFrame()
    inputs = SkillInputs(
        none, none, none, None, none, none, card={"error_rates": [row]}, probability_sample=True, mapped_water_share=0.2
    )
    found = design_based(inputs)
    assert found["overall"][0] == pytest.approx(0.9)
    assert found["overall"][1] == pytest.approx(1.96 * np.sqrt(0.04 * 0.09 / 49 + 0.64 * 0.09 / 99))
    assert found["water"]["user"][0] == pytest.approx(0.9)
    assert found["water"]["area_share"][0] == pytest.approx(0.26)
    assert found["water"]["producer"][0] == pytest.approx(0.18 / 0.26)
    assert design_based(SkillInputs(none, none, none, None, none, none, card={"error_rates": [row]})) is None
