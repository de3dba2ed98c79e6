"""The plot shows what it should."""

import io

import numpy as np
import pytest

from inundate.stage import daily_stage
from inundate.stage.plots import plot_logger
from tests.stage_scenario import make


@pytest.fixture(scope="module")
def figure():
    made = make(5, years=0.9, n=2, faults={"L1": ("spikes", "move")})
    got = daily_stage(made.registry, made.readings, made.barometer, made.checks, made.latitudes, weather=made.weather)
    own = got.corrections[got.corrections["logger_id"] == "L1"]
    checks = made.checks[made.checks["logger_id"] == "L1"]
    return plot_logger(got.flagged["L1"], checks, own, height_m=made.height["L1"], title="L1"), checks, got


def test_everything_is_named_with_units(figure):
    """Axes carry units, the legend every kind of mark."""
    plot, _, _ = figure
    axes, added = plot.axes
    assert axes.get_ylabel() == "stage, m above lowest ground"
    assert added.get_ylabel() == "added, cm"
    assert added.get_xlabel() == "time, UTC"
    names = " ".join(t.get_text() for t in axes.get_legend().get_texts())
    for word in ("as read", "stage", "field check", "spike ("):
        assert word in names
    assert any("moved" in t.get_text() for t in axes.texts)


def test_checks_and_stage_lie_where_they_should(figure):
    """The stage line's values are the frame's, and all checks are within the axes."""
    plot, checks, got = figure
    axes = plot.axes[0]
    line = next(one for one in axes.lines if one.get_label() == "stage")
    good = got.flagged["L1"].query("flag == 'good'")["stage_m"]
    shown = np.asarray(line.get_ydata(), float)
    assert np.nanmax(shown) == pytest.approx(good.max())
    assert np.nanmin(shown) == pytest.approx(good.min())
    low, high = axes.get_ylim()
    assert checks["stage_m"].between(low, high).all()


def test_it_can_be_drawn(figure):
    """To a file in memory, without a display."""
    out = io.BytesIO()
    figure[0].savefig(out, format="png", dpi=50)
    assert out.getvalue()[:4] == b"\x89PNG"
