"""Changes, members and years of regions: by hand, by the plain path, and whole jobs."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

sys.path.append(str(Path(__file__).parents[1] / "regions"))
from region_inputs import BASELINE, HORIZON, YEARS, write_assessment, write_results
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.simulations import Simulation, all_simulations
from stook.audit.plain.ensemble import Member, change_percent, summary
from stook.constants import OBSERVED, OUTSIDE
from stook.ensemble.changes import (
    CHANGES,
    MEMBERS,
    SPREAD,
    YEARLY,
    Group,
    changes_of,
    changes_table,
    members_table,
    yearly_table,
)
from stook.ensemble.job import changes
from stook.ensemble.series import Models, SystemSeries, read_series
from stook.errors import AssessmentError, ResultsError
from stook.grids.files import read_table
from stook.regions.job import totals

RUNS = [
    ("ALDER-ESM", "high", "r1"),
    ("ALDER-ESM", "high", "r2"),
    ("ROWAN-CM", "high", "r1"),
    ("ROWAN-CM", "moderate", "r1"),
]


def run_all(path: Path, region: str | None = None) -> Assessment:
    assessment = write_results(path, region)
    for run in all_simulations(assessment):
        totals(assessment, run.name, "maize")
    changes(assessment)
    return assessment


def tables(assessment: Assessment) -> tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    layout = Layout.of(assessment)
    return read_table(layout.changes), read_table(layout.members), read_table(layout.yearly)


def kinds(frame: pd.DataFrame) -> dict[str, str]:
    return {str(name): str(kind).replace("category", "str") for name, kind in frame.dtypes.items()}


# By hand


def hand_group(weights: dict[str, float] | None = None) -> Group:
    """Return two models, one with two runs, two draws beside the central estimate, two regions.

    Baseline 2000-2001, horizon 2010-2011. The second region has no harvested area.
    """
    runs = [Simulation(m, "high", r, {}) for m, r in (("A", "r1"), ("A", "r2"), ("B", "r1"))]
    series = []
    for ends in [(90, 80, 100), (130, 90, 150), (60, 50, 70)]:
        production = np.zeros((3, 2, 4))
        for draw, end in enumerate(ends):
            production[draw, 0] = [90, 110, end - 5, end + 5]
        shares = np.array([[0, 0, 0.2, 0.4], [np.nan] * 4])
        series.append(
            SystemSeries(
                ["West", "East"],
                np.array([2000, 2001, 2010, 2011]),
                production,
                np.array([20.0, 0]),
                np.array([1.0, 0]),
                shares,
            )
        )
    return Group("maize", "rainfed", "high", runs, series, Models.of(runs, weights, Path("a.yaml")))


def test_changes_by_hand() -> None:
    group = hand_group()
    found = changes_of(group.series, (2000, 2001), (2010, 2011))
    np.testing.assert_allclose(
        found.change[..., 0],
        [[-10, -20, 0], [30, -10, 50], [-40, -50, -30]],
        rtol=1e-12,
        atol=1e-12,
    )
    table = changes_table(group, "later", found)
    assert kinds(table) == CHANGES
    (row,) = table.to_dict("records")  # the region without area has none
    assert [row[key] for key in ("members", "simulations", "models")] == [6, 3, 2]
    # Model A: runs -10 and 20; model B: -40. Draws without the central estimate.
    assert row["change_mean"] == pytest.approx(((-10 + 20) / 2 - 40) / 2)
    assert row["central_mean"] == pytest.approx(((-10 + 30) / 2 - 40) / 2)
    # Below zero: -20 and -10 of A (1/8 each) and all of B (1/2); 0 is no decrease.
    assert row["share_decrease"] == pytest.approx(0.75)
    assert (row["likelihood"], row["likelihood_of"]) == ("likely", "decrease")
    # Median: weights 1/4, 1/4 at -50, -30, then 1/8 each at -20, -10, 0, 50; effective members
    # 1 / (2/16 + 4/64) = 16/3, so a window of 3/16 from 13/32: 3/32 of -30 and 3/32 of -20.
    assert row["change_p50"] == pytest.approx(-25)
    # Model A rises by 5 on average, model B falls, the median falls.
    assert row["agreement"] == 0.5
    assert row["baseline_production_t"] == pytest.approx(100)
    assert row["horizon_production_t"] == pytest.approx(((90 + 130) / 2 + 60) / 2)
    assert row["area_ha"] == pytest.approx(20)
    assert row["extrapolated_share"] == pytest.approx(0.3)


def test_weights_by_hand() -> None:
    group = hand_group({"A": 3.0, "B": 1.0, "C": 9.0})
    found = changes_of(group.series, (2000, 2001), (2010, 2011))
    (row,) = changes_table(group, "later", found).to_dict("records")
    assert row["change_mean"] == pytest.approx(0.75 * 5 - 0.25 * 40)
    assert row["agreement"] == 0.5  # models are counted, not weighed
    members = members_table(group, "later", found)
    assert kinds(members) == MEMBERS
    by_run = members.drop_duplicates("simulation").set_index("simulation")["weight"]
    assert by_run.to_dict() == {"A_high_r1": 0.375, "A_high_r2": 0.375, "B_high_r1": 0.25}
    assert members["draw"].tolist() == [0, 1, 2] * 3
    np.testing.assert_allclose(members["change"], found.change[..., 0].ravel())


def test_a_horizon_that_a_run_lacks_leaves_it_out() -> None:
    group = hand_group()
    group.series[0].production[:, 0, 2:] = np.nan
    found = changes_of(group.series, (2000, 2001), (2010, 2011))
    (row,) = changes_table(group, "later", found).to_dict("records")
    assert [row[key] for key in ("members", "simulations", "models")] == [4, 2, 2]
    assert row["change_mean"] == pytest.approx((20 - 40) / 2)  # r2 has all the weight of A
    assert row["horizon_production_t"] == pytest.approx((130 + 60) / 2)
    members = members_table(group, "later", found)
    assert members.drop_duplicates("simulation")["weight"].tolist() == [0.5, 0.5]


def test_a_horizon_that_no_run_has() -> None:
    group = hand_group()
    found = changes_of(group.series, (2000, 2001), (2040, 2049))
    (row,) = changes_table(group, "far", found).to_dict("records")
    assert row["members"] == row["models"] == 0
    assert np.isnan([row["change_mean"], row["share_decrease"], row["horizon_production_t"]]).all()
    assert not isinstance(row["likelihood"], str)
    assert members_table(group, "far", found).empty


def test_yearly_by_hand() -> None:
    table = yearly_table(hand_group())
    assert kinds(table) == YEARLY
    assert table["region"].unique().tolist() == ["West"]
    assert table["year"].tolist() == [2000, 2001, 2010, 2011]
    last = table.iloc[-1]
    assert last["production_mean_t"] == pytest.approx(
        ((95 + 155 + 85 + 105) / 4 + (55 + 75) / 2) / 2
    )
    assert last["yield_mean"] == pytest.approx(last["production_mean_t"] / 20)
    first = table.iloc[0][[f"yield_{name}" for name in SPREAD]]
    assert first.tolist() == [4.5] * 5


# Whole jobs


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> Assessment:
    return run_all(write_assessment(tmp_path_factory.mktemp("ensemble"), RUNS))


def test_tables(full: Assessment) -> None:
    changed, members, yearly = tables(full)
    assert kinds(changed) == CHANGES
    assert kinds(members) == MEMBERS
    assert kinds(yearly) == YEARLY
    rows = 3 * 4 * 2  # systems with their combination, regions with the rest, scenarios
    assert len(changed) == rows
    assert len(members) == 3 * 4 * len(RUNS) * 5
    assert len(yearly) == rows * YEARS.size
    assert set(changed["region"]) == {"Saltmere", "Thornfold", "Brackwater", OUTSIDE}
    high = changed[changed["scenario"] == "high"]
    assert set(high["members"]) == {12}
    assert set(high["models"]) == {2}
    assert set(changed[changed["scenario"] == "moderate"]["models"]) == {1}
    spread = changed[[f"change_{name}" for name in SPREAD]].to_numpy()
    assert (np.diff(spread, axis=1) >= 0).all()


def statements(full: Assessment) -> Iterator[tuple[dict[str, object], pd.DataFrame]]:
    changed, members, _ = tables(full)
    for row in changed.to_dict("records"):
        same = np.ones(len(members), dtype=bool)
        for key in ("crop", "system", "region", "scenario", "horizon"):
            same &= (members[key] == row[key]).to_numpy()
        yield row, members[same]


def test_changes_against_the_plain_path(full: Assessment) -> None:
    """Again from the totals: plain means of periods, plain summary of members."""
    layout = Layout.of(full)
    frames = {r.name: read_table(layout.totals(r.name, "maize")) for r in all_simulations(full)}
    for row, members in statements(full):
        found = []
        for member in members.itertuples():
            frame = frames[member.simulation]
            own = frame[
                (frame["system"] == row["system"])
                & (frame["region"] == row["region"])
                & (frame["draw"] == member.draw)
            ]
            production = dict(zip(own["year"], own["production_t"], strict=True))
            change = change_percent(production, BASELINE, HORIZON)
            assert member.change == pytest.approx(change, rel=1e-9)
            found.append((member.draw, Member(member.model, member.simulation, change)))
        drawn = summary([member for draw, member in found if draw > 0])
        central = summary([member for draw, member in found if draw == 0])
        assert row["members"] == drawn.members
        assert row["simulations"] == drawn.simulations
        assert row["change_mean"] == pytest.approx(drawn.mean, rel=1e-9)
        assert row["central_mean"] == pytest.approx(central.mean, rel=1e-9)
        for percentile in (5, 17, 50, 83, 95):
            name = f"p{percentile:02d}"
            assert row[f"change_{name}"] == pytest.approx(drawn.percentiles[percentile], rel=1e-9)
            assert row[f"central_{name}"] == pytest.approx(
                central.percentiles[percentile], rel=1e-9
            )
        assert row["share_decrease"] == pytest.approx(drawn.share_decrease, rel=1e-9)
        assert row["agreement"] == pytest.approx(drawn.agreement)
        assert (row["likelihood"], row["likelihood_of"]) == (drawn.word, drawn.word_of)


def test_weights_sum_to_one(full: Assessment) -> None:
    for _, members in statements(full):
        central = members[members["draw"] == 0]
        assert central["weight"].sum() == pytest.approx(1, rel=1e-12)
        by_model = central.groupby("model", observed=True)["weight"].sum()
        np.testing.assert_allclose(by_model, 1 / len(by_model), rtol=1e-12)


def test_a_subset_has_the_same_bits(full: Assessment) -> None:
    part = run_all(full.source, "Thornfold")
    for own, whole in zip(tables(part), tables(full), strict=True):
        expected = whole[whole["region"] == "Thornfold"].reset_index(drop=True)
        names = [c for c in expected if isinstance(expected[c].dtype, pd.CategoricalDtype)]
        expected, own = (f.astype(dict.fromkeys(names, "str")) for f in (expected, own))
        pd.testing.assert_frame_equal(own, expected, check_exact=True)


def test_without_horizons(tmp_path: Path) -> None:
    assessment = run_all(write_assessment(tmp_path, RUNS[:1], horizons={}))
    changed, members, yearly = tables(assessment)
    assert changed.empty
    assert members.empty
    assert list(changed) == list(CHANGES)
    assert list(members) == list(MEMBERS)
    assert kinds(changed) == CHANGES
    assert kinds(members) == MEMBERS
    assert len(yearly) == 3 * 4 * YEARS.size


def test_observed_alone(tmp_path: Path) -> None:
    assessment = run_all(write_assessment(tmp_path, runs=()))
    changed, members, yearly = tables(assessment)
    assert changed.empty
    assert members.empty
    assert set(yearly["scenario"]) == {OBSERVED}
    frame = read_table(Layout.of(assessment).totals(OBSERVED, "maize"))
    own = frame[(frame["system"] == "all") & (frame["region"] == "Saltmere") & (frame["draw"] > 0)]
    yields = (own["production_t"] / own["area_ha"]).groupby(own["year"])
    row = yearly[(yearly["system"] == "all") & (yearly["region"] == "Saltmere")]
    np.testing.assert_allclose(row["yield_p50"], yields.median(), rtol=1e-12)
    np.testing.assert_allclose(row["yield_p95"], yields.quantile(0.95), rtol=1e-12)


def test_one_run_without_draws(tmp_path: Path) -> None:
    path = write_assessment(tmp_path, RUNS[:1], ensemble={"draws": 0}, systems=("rainfed",))
    changed, members, _ = tables(run_all(path))
    assert set(changed["members"]) == {1}
    assert set(members["draw"]) == {0}
    for name in ("mean", *SPREAD):
        np.testing.assert_array_equal(changed[f"change_{name}"], changed[f"central_{name}"])
    assert set(changed["agreement"]) == {1.0}


@pytest.mark.parametrize(
    ("weights", "message"),
    [
        ({"ALDER-ESM": 1.0}, "no weight for ROWAN-CM; name every model"),
        ({"ALDER-ESM": 1.0, "ROWAN-CM": -1.0}, "weights must not be negative"),
        ({"ALDER-ESM": 0.0, "ROWAN-CM": 0.0}, "at least one model must have a weight above 0"),
    ],
)
def test_bad_weights(weights: dict[str, float], message: str) -> None:
    runs = [Simulation(m, s, r, {}) for m, s, r in RUNS]
    with pytest.raises(AssessmentError, match=rf"^a\.yaml: ensemble\.weights: {message}$"):
        Models.of(runs, weights, Path("a.yaml"))


def test_bad_totals(tmp_path: Path) -> None:
    with pytest.raises(ResultsError, match=r"none\.parquet: no such file; run the stage"):
        read_series(tmp_path / "none.parquet")
    (tmp_path / "bad.parquet").write_text("not a table")
    with pytest.raises(ResultsError, match=r"bad\.parquet: cannot be read \(.*delete it and run"):
        read_series(tmp_path / "bad.parquet")
