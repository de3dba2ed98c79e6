"""How mixed pixels show their water, settled by full wetlands."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from inundate.extent.estimate import shown
from inundate.extent.response import UNKNOWN, possible_responses


def made(blur: float, steep: float, bend: float, noise: float = 0.03, seed: int = 0) -> list[np.ndarray]:
    """Return full wetlands' pixels (share, share beside, shown) under a response, five wetlands."""
    rng = np.random.default_rng(seed)
    parts = []
    for _ in range(5):
        share = np.concatenate([np.zeros(40), rng.uniform(0, 1, 60), np.ones(60)])
        beside = np.clip(share + rng.normal(0, 0.25, share.size), 0, 1)
        value = shown((1 - blur) * share + blur * beside, steep, bend) + rng.normal(0, noise, share.size)
        parts.append(np.stack([share, beside, value]))
    return parts


def test_shown_by_hand():
    """Odds of 1 to 1, squared and over 3: a quarter; a plain response changes nothing."""
    assert shown(np.array([0.5]), 2.0, 3.0)[0] == pytest.approx(0.25)
    held = np.array([0.0, 0.2, 1.0])
    assert shown(held, 1.0, 1.0) is held
    assert shown(held, 1.7, 2.0)[[0, 2]] == pytest.approx([0.0, 1.0])


@pytest.mark.parametrize("planted", [(0.0, 1.0, 1.0), (0.4, 1.6, 1.7), (0.3, 1.0, 3.0), (0.5, 2.5, 1.3)])
def test_a_planted_response_is_among_the_possible_ones(planted):
    """The best candidate predicts what the planted response does (within 0.1, mean 0.03), and all stay near it."""
    found = possible_responses(made(*planted))
    x, y = np.meshgrid(np.linspace(0, 1, 11), np.linspace(0, 1, 11))
    near = np.abs(x - y) < 0.5
    b = shown((1 - planted[0]) * x + planted[0] * y, planted[1], planted[2])
    for place, (blur, steep, bend) in enumerate(found):
        gap = np.abs(shown((1 - blur) * x + blur * y, steep, bend) - b)[near]
        assert gap.mean() < 0.05
        if place == 0:
            assert gap.max() < 0.1
            assert gap.mean() < 0.03
    assert (np.abs(found - np.array(planted)).max(axis=1) < 0.05).any()


def test_without_full_wetlands_a_little_of_each():
    """Too few mixed pixels tell nothing."""
    assert possible_responses([]) is UNKNOWN
    assert possible_responses([made(0.4, 1.6, 1.7)[0][:, :60]]) is UNKNOWN


@given(st.floats(1, 3), st.floats(1, 3))
def test_more_water_shows_more(steep, bend):
    """The response rises from 0 to 1."""
    out = shown(np.linspace(0, 1, 51), steep, bend)
    assert out[0] == 0.0
    assert out[-1] == 1.0
    assert (np.diff(out) >= 0).all()
