"""Site pixels: the same as a dense mask gives, in windows that hold each pixel once."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage

from inundate.common.grid import Grid, Window
from inundate.common.site import make_site

cells = st.lists(st.tuples(st.integers(-3, 50), st.integers(-3, 70)), min_size=0, max_size=40)


@settings(max_examples=80, deadline=None)
@given(cells, st.integers(0, 3), st.sampled_from([8, 17, 256]))
def test_site_equals_a_dilated_mask(places, margin, block):
    """Row-major, distinct, on the grid; windows are the tight boxes of blocks, disjoint, and hold each pixel once."""
    grid = Grid("EPSG:32633", 0.0, 0.0, 10.0, 45, 64)
    rows, cols = np.array(places, int).reshape(-1, 2).T
    site = make_site(grid, rows, cols, margin=margin, block=block)
    mask = np.zeros((45, 64), bool)
    keep = grid.inside(rows, cols)
    mask[rows[keep], cols[keep]] = True
    if margin:
        mask = ndimage.binary_dilation(mask, np.ones((2 * margin + 1,) * 2, bool))
    want = np.nonzero(mask)
    np.testing.assert_array_equal(site.rows, want[0])
    np.testing.assert_array_equal(site.cols, want[1])
    count = np.zeros((45, 64), int)
    for number, window in enumerate(site.windows):
        place = site.place(number)
        r, c = site.rows[place], site.cols[place]
        assert window == Window(r.min(), r.max() + 1, c.min(), c.max() + 1)
        assert len(set(zip(r // block, c // block, strict=True))) == 1
        np.testing.assert_array_equal(np.sort(place), place)
        count[window.slices] += 1
    assert count.max(initial=0) <= 1
    assert sorted(site.order) == list(range(site.size))
