"""The leaf calendar recovers known dates, tells covers apart, and does not depend on the order of rows."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pandas.testing import assert_frame_equal
from sklearn.exceptions import NotFittedError

from inundate.common.codes import LEAF_STATES
from inundate.common.errors import InputError
from inundate.leaves import LeafCalendar
from tests.leaves_world import warmth, world

NONE = pd.DataFrame({"wetland_id": [], "date": [], "ndvi": []})
FIXED = {"green_up": "04-20", "leaf_on": "05-15", "leaf_fall": "10-05", "leaf_off": "11-10"}
KNOTS = ["green_up_start", "green_up_mid", "green_up_end", "leaf_fall_start", "leaf_fall_mid", "leaf_fall_end"]


@pytest.fixture(scope="module")
def made() -> tuple[pd.DataFrame, pd.DataFrame, LeafCalendar]:
    greenness, truth = world()
    return greenness, truth, LeafCalendar().fit(greenness)


def errors(calendar: LeafCalendar, truth: pd.DataFrame, kind: str = "deciduous") -> pd.DataFrame:
    both = calendar.seasons_.merge(truth[truth["kind"] == kind], on=["wetland_id", "year"])
    want = {
        "green_up_start": both["up"] - both["up_reach"],
        "green_up_mid": both["up"],
        "green_up_end": both["up"] + both["up_reach"],
        "leaf_fall_start": both["down"] - both["down_reach"],
        "leaf_fall_mid": both["down"],
        "leaf_fall_end": both["down"] + both["down_reach"],
    }
    out = pd.DataFrame({k: both[k].dt.day_of_year - v for k, v in want.items()})
    out[["up_sd", "fall_sd"]] = both[["green_up_sd_days", "leaf_fall_sd_days"]]
    return out


def test_dates_are_recovered_through_clouds(made: tuple) -> None:
    """A view every 5 days, half of them clouded, haze and snow: each date within 7 days, the middles within 5 (medians)."""
    off = errors(made[2], made[1])
    assert len(off) == 18 * 4
    for name in KNOTS:
        assert off[name].abs().median() <= 7.0, name
    assert off["green_up_mid"].abs().median() <= 5.0
    assert off["leaf_fall_mid"].abs().median() <= 5.0


def test_uncertainty_covers_the_error(made: tuple) -> None:
    """The 90 % interval of the stated spread holds at least 80 % of the true dates, and is not idle."""
    off = errors(made[2], made[1])
    for mid, sd in (("green_up_mid", "up_sd"), ("leaf_fall_mid", "fall_sd")):
        assert (off[mid].abs() <= 1.645 * off[sd]).mean() >= 0.8
        assert off[sd].median() < 8.0


def test_covers_are_told_apart(made: tuple) -> None:
    _, truth, calendar = made
    want = truth.drop_duplicates("wetland_id").set_index("wetland_id")["kind"].to_dict()
    assert calendar.cover_ == want


def test_rows_in_any_order_give_the_same_calendar(made: tuple) -> None:
    greenness, _, calendar = made
    again = LeafCalendar().fit(greenness.sample(frac=1.0, random_state=4))
    assert_frame_equal(again.seasons_, calendar.seasons_, check_exact=True)
    assert again.to_json() == calendar.to_json()


def test_views_that_say_nothing_change_nothing(made: tuple) -> None:
    """Rows with NaN greenness or no weight are as if absent."""
    greenness, _, calendar = made
    more = greenness.assign(weight=1.0)
    idle = more.iloc[::7].assign(ndvi=np.nan)
    weightless = more.iloc[::5].assign(ndvi=0.9, weight=0.0)
    again = LeafCalendar().fit(pd.concat([idle, more, weightless]))
    assert_frame_equal(again.seasons_, calendar.seasons_, check_exact=True)


def test_a_light_outlier_is_ignored(made: tuple) -> None:
    """One absurd view of small weight, and one of full weight, move the date by less than a day and two."""
    greenness, _, calendar = made
    base = calendar.seasons_.query("wetland_id == 'W00' and year == 2032")["green_up_mid"].iloc[0]
    for weight, most in ((0.05, 1), (1.0, 2)):
        odd = pd.DataFrame({"wetland_id": ["W00"], "date": [base], "ndvi": [-0.9], "weight": [weight]})
        again = LeafCalendar().fit(pd.concat([greenness.assign(weight=1.0), odd]))
        moved = again.seasons_.query("wetland_id == 'W00' and year == 2032")["green_up_mid"].iloc[0] - base
        assert abs(moved.days) <= most


def test_few_views_lean_on_neighbours_and_say_so() -> None:
    """With a view every 20 days dates still come within 7 days, by pooling, and the stated spread is wider."""
    dense, _ = world(seed=3)
    sparse, truth = world(seed=3, every=20)
    wide, narrow = LeafCalendar().fit(sparse), LeafCalendar().fit(dense)
    off = errors(wide, truth)
    assert off["green_up_mid"].abs().median() <= 7.0
    assert off["leaf_fall_mid"].abs().median() <= 7.0
    assert wide.seasons_["green_up_sd_days"].median() > narrow.seasons_["green_up_sd_days"].median()
    assert (wide.seasons_["source"] == "pooled").sum() > (narrow.seasons_["source"] == "pooled").sum()


def test_a_wetland_never_seen_in_a_year_follows_the_year() -> None:
    """Views of one wetland are missing in an early year: its dates follow the landscape's, not its own mean."""
    greenness, truth = world(seed=5)
    year = greenness["date"].dt.year
    calendar = LeafCalendar().fit(greenness[~((greenness["wetland_id"] == "W00") & (year == 2033))])
    row = calendar.seasons_.query("wetland_id == 'W00' and year == 2033").iloc[0]
    want = truth.query("wetland_id == 'W00' and year == 2033")["up"].iloc[0]
    assert row["n_views"] == 0
    assert row["source"] == "pooled"
    assert abs(row["green_up_mid"].day_of_year - want) <= 7


def test_southern_seasons_span_new_year(made: tuple) -> None:
    """The same greenness half a year later gives the same dates half a year later."""
    greenness, _, calendar = made
    late = LeafCalendar().fit(greenness.assign(date=greenness["date"] + pd.Timedelta(days=182)))
    assert late.offset_days_ == 182
    moved = late.seasons_.merge(calendar.seasons_, on=["wetland_id", "year"], suffixes=("", "_north"))
    lag = (moved["green_up_mid"] - moved["green_up_mid_north"]).dropna().dt.days
    assert ((lag - 182).abs() <= 1).all()


def test_temperature_tells_years_without_views(made: tuple) -> None:
    """A year without views takes its green-up from warmth: a year warmer by 3 C is earlier than one colder by 3 C."""
    greenness, _, _ = made
    temperature = warmth(range(2031, 2037), {2035: 3.0, 2036: -3.0})
    calendar = LeafCalendar().fit(greenness, temperature)
    rows = calendar.landscape_.set_index("year")
    assert (rows.loc[[2035, 2036], "source"] == "temperature").all()
    assert rows.loc[2035, "green_up_mid"].day_of_year + 10 < rows.loc[2036, "green_up_mid"].day_of_year
    assert rows.loc[2035, "sd_days"] > rows.loc[2032, "sd_days"]
    alone = LeafCalendar().fit(NONE, temperature).landscape_.set_index("year")
    assert (alone["source"] == "temperature").all()
    assert alone.loc[2035, "green_up_mid"].day_of_year < alone.loc[2036, "green_up_mid"].day_of_year


def test_without_anything_the_usual_days_serve() -> None:
    calendar = LeafCalendar().fit(NONE)
    assert set(calendar.landscape_["source"]) == {"day_of_year"}
    codes, share = calendar.states("W1", ["2040-01-15", "2040-07-15"])
    assert [LEAF_STATES[c] for c in codes] == ["leaf_off", "leaf_on"]
    assert share[0] < 0.01
    assert share[1] > 0.99


def test_fixed_dates_override(made: tuple) -> None:
    """A user's dates hold in every year, leap or not, for every wetland that has leaves to shed."""
    calendar = LeafCalendar().fit(made[0], fixed=FIXED)
    rows = calendar.seasons_.query("cover != 'evergreen'")
    for column, value in zip(
        ("green_up_start", "green_up_end", "leaf_fall_start", "leaf_fall_end"), FIXED.values(), strict=True
    ):
        assert (rows[column].dt.strftime("%m-%d") == value).all()
    assert (rows["sd_days"] == 0).all()
    assert (rows["source"] == "fixed").all()
    dates = ["2032-04-19", "2032-04-20", "2032-05-15", "2032-10-05", "2032-11-10"]
    codes, _ = calendar.states("W00", dates)
    assert [LEAF_STATES[c] for c in codes] == ["leaf_off", "green_up", "leaf_on", "leaf_fall", "leaf_off"]


def test_one_fixed_date_moves_its_limb(made: tuple) -> None:
    """With the start of green-up alone given, its end follows at the length that greenness tells."""
    _, _, free = made
    one = LeafCalendar().fit(made[0], fixed={"green_up": "04-01"})
    a, b = (c.seasons_.query("wetland_id == 'W01' and year == 2031").iloc[0] for c in (free, one))
    assert b["green_up_start"] == pd.Timestamp("2031-04-01")
    assert abs(((b["green_up_end"] - b["green_up_start"]) - (a["green_up_end"] - a["green_up_start"])).days) <= 1
    assert b["leaf_fall_mid"] == a["leaf_fall_mid"]


def test_evergreen_is_in_leaf_all_year(made: tuple) -> None:
    _, _, calendar = made
    codes, share = calendar.states("W06", pd.date_range("2032-01-01", "2032-12-31", freq="7D"))
    assert set(codes) == {2}
    assert (share == 1).all()
    assert calendar.seasons_.query("wetland_id == 'W06'")["green_up_mid"].isna().all()


@settings(max_examples=40, deadline=None)
@given(
    start=st.integers(0, 3),
    day=st.integers(-400, 2000),
    wetland=st.sampled_from(["W00", "W03", "W06", "", "never seen"]),
)
def test_share_and_state_agree(start: int, day: int, wetland: str) -> None:
    """Leaf share lies in 0..1, rises until midsummer and falls after it; states come in their order within a year."""
    calendar = _shared()
    first = np.datetime64("2031-01-01") + np.timedelta64(day, "D")
    dates = np.datetime64(str(first.astype("datetime64[Y]")), "D") + np.arange(365).astype("timedelta64[D]")
    codes, share = calendar.states(wetland, dates[start:])
    assert codes.dtype == np.uint8
    assert share.dtype == np.float32
    assert ((share >= 0) & (share <= 1)).all()
    if wetland == "W06":
        return
    top = int(np.argmax(share))
    assert (np.diff(share[: top + 1]) >= -1e-6).all()
    assert (np.diff(share[top:]) <= 1e-6).all()
    order = codes.astype(int).tolist()
    assert [c for i, c in enumerate(order) if i == 0 or c != order[i - 1]] in ([0, 1, 2, 3, 0], [0, 1, 2, 3])
    assert (share[codes == 2] >= 0.75).all()
    assert (share[codes == 0] <= 0.25).all()


_KEPT: list[LeafCalendar] = []


def _shared() -> LeafCalendar:
    if not _KEPT:
        _KEPT.append(LeafCalendar().fit(world()[0]))
    return _KEPT[0]


def test_daily_is_states_in_a_table(made: tuple) -> None:
    _, _, calendar = made
    dates = pd.date_range("2032-04-01", "2032-04-30")
    table = calendar.daily(dates[::-1])
    assert list(table.columns) == ["wetland_id", "date", "leaf_state", "leaf_share"]
    assert len(table) == 24 * 30
    assert table[["wetland_id", "date"]].equals(table[["wetland_id", "date"]].sort_values(["wetland_id", "date"]))
    codes, share = calendar.states(table["wetland_id"].to_numpy(), table["date"].to_numpy())
    assert (np.array(LEAF_STATES)[codes] == table["leaf_state"]).all()
    np.testing.assert_array_equal(share, table["leaf_share"].to_numpy())


def test_json_round_trip(made: tuple) -> None:
    _, _, calendar = made
    back = LeafCalendar.from_json(calendar.to_json())
    assert_frame_equal(back.seasons_, calendar.seasons_)
    assert_frame_equal(back.landscape_, calendar.landscape_)
    assert back.cover_ == calendar.cover_
    dates = pd.date_range("2030-06-01", "2036-06-01", freq="11D")
    for wetland in ("W00", "W03", "W06", "other"):
        for got, want in zip(back.states(wetland, dates), calendar.states(wetland, dates), strict=True):
            np.testing.assert_array_equal(got, want)


def test_unfitted_refuses() -> None:
    with pytest.raises(NotFittedError):
        LeafCalendar().states("W1", "2031-01-01")


def test_plain_double_logistic_gives_amplitude_dates() -> None:
    """Without saturation, on a plain double logistic, the dates are its own midpoints."""
    day = np.arange(1, 366, 4)
    value = 0.2 + 0.6 * (1 / (1 + np.exp(-(day - 120) / 6.0)) - 1 / (1 + np.exp(-(day - 280) / 9.0)))
    dates = np.datetime64("2031-01-01") + (day - 1).astype("timedelta64[D]")
    calendar = LeafCalendar(saturation=False).fit(pd.DataFrame({"wetland_id": "W", "date": dates, "ndvi": value}))
    row = calendar.seasons_.iloc[0]
    assert abs(row["green_up_mid"].day_of_year - 120) <= 1
    assert abs(row["leaf_fall_mid"].day_of_year - 280) <= 1
    assert abs(row["green_up_start"].day_of_year - (120 - 6 * np.log(9))) <= 2


@pytest.mark.parametrize(
    ("frame", "message"),
    [
        ({"wetland_id": ["A"], "date": ["2031-01-01"]}, "greenness: column 'ndvi' is missing"),
        (
            {"wetland_id": ["A"], "date": ["2031-01-01"], "ndvi": [7400]},
            r"row 0 \(wetland_id A\): ndvi 7400 lies outside",
        ),
        ({"wetland_id": ["A"], "date": ["spring"], "ndvi": [0.5]}, "value 'spring' at position 0 is not a date"),
    ],
)
def test_bad_greenness_is_named(frame: dict, message: str) -> None:
    with pytest.raises(InputError, match=message):
        LeafCalendar().fit(pd.DataFrame(frame))


@pytest.mark.parametrize(
    ("fixed", "message"),
    [
        ({"spring": "04-01"}, "key 'spring' is unknown; use green_up, leaf_on, leaf_fall, leaf_off"),
        ({"leaf_on": "4-1"}, "leaf_on = '4-1' is not MM-DD"),
        ({"leaf_on": "02-30"}, "leaf_on = '02-30' is no day of the year"),
        ({"green_up": "06-01", "leaf_on": "05-01"}, "green_up = 06-01 is not before leaf_on = 05-01"),
    ],
)
def test_bad_fixed_dates_are_named(fixed: dict, message: str) -> None:
    with pytest.raises(InputError, match=message):
        LeafCalendar().fit(NONE, fixed=fixed)


def test_bad_temperature_is_named() -> None:
    frame = pd.DataFrame({"date": ["2031-01-01"], "air_temperature_c": [280.0]})
    with pytest.raises(InputError, match=r"temperature row 0: air_temperature_c 280.0 lies outside -80..60"):
        LeafCalendar().fit(NONE, frame)


def test_other_bad_input_is_named(made: tuple) -> None:
    with pytest.raises(InputError, match="2 wetland_ids against 3 dates"):
        made[2].states(["a", "b"], ["2031-01-01"] * 3)
    with pytest.raises(InputError, match="dense_greenness: 8500 lies outside"):
        LeafCalendar(dense_greenness=8500).fit(NONE)
    with pytest.raises(InputError, match=r"dense_greenness 0.200 is not above bare_greenness 0.300"):
        LeafCalendar(dense_greenness=0.2, bare_greenness=0.3).fit(NONE)
    with pytest.raises(InputError, match="leaf calendar: not JSON written by to_json"):
        LeafCalendar.from_json("{}")
