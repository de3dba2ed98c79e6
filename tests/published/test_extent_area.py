"""Error-adjusted area against the published worked example.

Source: Olofsson P., Foody G. M., Herold M., Stehman S. V., Woodcock C. E., Wulder M. A. 2014. Good practices for
estimating area and assessing accuracy of land change. Remote Sensing of Environment 148:42-57, section 5 and tables 8, 9.
The paper prints producer's half-widths 0.21, 0.23, 0.03, 0.01; its own equation 7 gives 0.213, 0.254, 0.034, 0.018 for the
printed counts. Here the equation is held, and the printed values where they agree.
"""

from __future__ import annotations

import numpy as np
import pytest

from inundate.common.errors import InputError
from inundate.extent import error_adjusted_area

COUNTS = [[66, 0, 5, 4], [0, 55, 8, 12], [1, 0, 153, 11], [2, 1, 9, 313]]
PIXELS = np.array([200_000, 150_000, 3_200_000, 6_450_000])
PIXEL_HA = 0.09


def test_worked_example_to_its_printed_digits() -> None:
    got = error_adjusted_area(COUNTS, PIXELS * PIXEL_HA)
    assert np.round(got.area).tolist() == [21158, 11686, 285770, 581386]  # table text, ha
    assert np.round(1.96 * got.area_se).tolist() == [6158, 3756, 15510, 16282]
    assert round(got.overall, 2) == 0.95
    assert round(1.96 * got.overall_se, 2) == 0.02
    assert np.round(got.user, 2).tolist() == [0.88, 0.73, 0.93, 0.96]
    assert np.round(1.96 * got.user_se, 2).tolist() == [0.07, 0.10, 0.04, 0.02]
    assert np.round(got.producer, 2).tolist() == [0.75, 0.85, 0.93, 0.96]
    printed = [[0.0176, 0, 0.0013, 0.0011], [0, 0.0110, 0.0016, 0.0024]]
    printed += [[0.0019, 0, 0.2967, 0.0213], [0.0040, 0.0020, 0.0179, 0.6212]]
    np.testing.assert_allclose(np.round(got.proportions, 4), printed, atol=1e-9)


def test_producer_half_widths_follow_equation_7() -> None:
    got = error_adjusted_area(COUNTS, PIXELS)
    np.testing.assert_allclose(1.96 * got.producer_se, [0.213310, 0.254408, 0.034324, 0.018362], atol=1e-5)


def test_2013_example() -> None:
    """Olofsson P. et al. 2013, Remote Sensing of Environment 129:122-131; counts typed from memory."""
    got = error_adjusted_area([[97, 0, 3], [3, 279, 18], [2, 1, 97]], [22_353, 1_122_543, 610_228])
    assert got.area[0] == pytest.approx(45_112.4, abs=0.1)
    assert 1.96 * got.area_se[0] * PIXEL_HA == pytest.approx(1896.55, abs=0.02)
    assert got.overall == pytest.approx(0.944417, abs=1e-6)


@pytest.mark.parametrize(
    ("counts", "area", "words"),
    [
        ([[1, 2, 3]], [1.0], "square matrix"),
        ([[1, 0], [3, 4]], [1.0, 1.0], "two sample units"),
        ([[5, -1], [3, 4]], [1.0, 1.0], "negative or missing"),
    ],
)
def test_bad_counts(counts: list[list[float]], area: list[float], words: str) -> None:
    with pytest.raises(InputError, match=words):
        error_adjusted_area(counts, area)
