"""The technology path: by hand, the plain path, what it changes and what not, its table."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import TypeAdapter, ValidationError
from stook.audit.plain.yields import technology_factor
from stook.errors import InputError
from stook.yields.grids import yield_grids
from stook.yields.technology import (
    Technology,
    climate_yield,
    describe_technology,
    technology_factors,
)
from yields_inputs import invented_indices, layer, response

ADAPTER: TypeAdapter[Technology] = TypeAdapter(Technology)
YEARS = np.arange(1991, 2101)
LAST = 2010


def factors(folder: Path = Path(), **content: object) -> pd.Series:
    found = technology_factors(ADAPTER.validate_python(content), YEARS, LAST, folder)
    assert found is not None
    return found


def test_linear_by_hand() -> None:
    found = factors(form="linear", rate=0.8)
    assert (found.loc[:2010] == 1).all()
    assert found[2011] == 1.008
    assert found[2060] == pytest.approx(1.4, rel=1e-15)


def test_levelling_off_starts_with_its_rate_and_ends_at_its_ceiling() -> None:
    """To 150 %: half of the gain is there after ln 2 x 0.5 / 0.01 = 34.66 years."""
    found = factors(form="levelling-off", rate=1.0, ceiling=150)
    assert (found.loc[:2010] == 1).all()
    assert found[2011] == pytest.approx(1 + 0.5 * (1 - np.exp(-0.02)), rel=1e-14)
    assert 1.24 < found[2044] < 1.25 < found[2045]
    assert found.is_monotonic_increasing
    assert found.max() < 1.5
    flat = factors(form="levelling-off", rate=0.0, ceiling=150)
    assert (flat == 1).all()


def test_constant_is_none() -> None:
    assert (
        technology_factors(ADAPTER.validate_python({"form": "constant"}), YEARS, LAST, Path())
        is None
    )


def test_table_against_pandas(tmp_path: Path) -> None:
    """pandas: interpolation by the values of the index."""
    given = pd.DataFrame({"year": [2100, 2000, 2030, 2050], "factor": [1.1, 1.0, 1.2, 1.5]})
    given.to_csv(tmp_path / "path.csv", index=False)
    found = factors(tmp_path, form="table", file="path.csv")
    known = pd.Series({1991: 1.0, 2010: 1.0, 2030: 1.2, 2050: 1.5, 2100: 1.1})
    expected = known.reindex(YEARS).interpolate("index")
    np.testing.assert_allclose(found, expected, rtol=1e-14)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (None, "no such file"),
        ("year,value\n2020,1.1\n", "lacks the column factor"),
        ("year,factor\n2100,1.1\n2100,1.2\n", "every year stand once"),
        ("year,factor\n2100,-1\n", "above 0"),
        ("year,factor\n2100,much\n", "above 0"),
        ("year,factor\n2005,0.9\n2100,1.1\n", "must be 1 up to 2010"),
        ("year,factor\n2080,1.1\n", "ends in 2080; years to 2100 are needed"),
    ],
)
def test_faults_of_the_table(tmp_path: Path, text: str | None, message: str) -> None:
    if text is not None:
        (tmp_path / "path.csv").write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match=rf"path.csv: .*{message}") as caught:
        factors(tmp_path, form="table", file="path.csv")
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    "content",
    [
        {"form": "linear"},
        {"form": "linear", "rate": -1},
        {"form": "levelling-off", "rate": 1, "ceiling": 90},
        {"form": "table"},
        {"form": "steep"},
    ],
)
def test_faults_of_the_keys(content: dict[str, object]) -> None:
    with pytest.raises(ValidationError):
        ADAPTER.validate_python(content)


@settings(max_examples=30, deadline=None, derandomize=True)
@given(
    rate=st.floats(0, 10),
    ceiling=st.floats(101, 1000),
    form=st.sampled_from(["linear", "levelling-off"]),
    last=st.integers(1985, 2105),
)
def test_same_as_the_plain_path(rate: float, ceiling: float, form: str, last: int) -> None:
    content = {"form": form, "rate": rate} | ({"ceiling": ceiling} if form != "linear" else {})
    technology = ADAPTER.validate_python(content)
    found = technology_factors(technology, YEARS, last, Path())
    expected = [technology_factor(technology, int(year), last, {}) for year in YEARS]
    np.testing.assert_allclose(found, expected, rtol=1e-12)


def test_a_table_is_the_same_as_the_plain_path(tmp_path: Path) -> None:
    table = {1995: 1.0, 2013: 1.07, 2040: 1.3, 2041: 1.2, 2100: 1.6}
    frame = pd.DataFrame({"year": list(table), "factor": list(table.values())})
    frame.to_csv(tmp_path / "path.csv", index=False)
    found = factors(tmp_path, form="table", file="path.csv")
    technology = ADAPTER.validate_python({"form": "table", "file": "path.csv"})
    expected = [technology_factor(technology, int(year), LAST, table) for year in YEARS]
    np.testing.assert_allclose(found, expected, rtol=1e-14)


def grids(indices: xr.Dataset, link: str, technology: pd.Series | None) -> xr.Dataset:
    model = response(link)
    return yield_grids(
        indices,
        layer(indices, 5.0),
        layer(indices, np.int8(0)),
        model,
        model.coefficient_vector,
        (1991, 2010),
        technology,
    )


@pytest.mark.parametrize("link", ["log", "level"])
def test_the_yield_is_scaled_and_nothing_else(link: str) -> None:
    indices = invented_indices(range(1991, 2101), (2, 3))
    technology = factors(form="linear", rate=1.0)
    without, found = grids(indices, link, None), grids(indices, link, technology)
    assert set(found) - set(without) == {"technology"}
    expected = without["yield"] * xr.DataArray(technology.to_numpy(), dims="year")
    np.testing.assert_array_equal(found["yield"], expected)
    for name in set(without) - {"yield"}:
        assert found[name].values.tobytes() == without[name].values.tobytes()
    np.testing.assert_allclose(climate_yield(found), without["yield"], rtol=1e-15)
    assert climate_yield(found).attrs == found["yield"].attrs
    assert "technology" in found["yield"].attrs["comment"]
    assert climate_yield(without).values.tobytes() == without["yield"].values.tobytes()


@pytest.mark.parametrize("link", ["log", "level"])
def test_no_climate_change_gives_no_change_whatever_the_technology(link: str) -> None:
    indices = invented_indices(range(1991, 2011), (2, 2))
    later = indices.assign_coords(year=np.arange(2081, 2101))
    both = xr.concat([indices, later], "year", data_vars="minimal")
    yields = climate_yield(grids(both, link, factors(form="linear", rate=1.0)))
    before, after = (yields.sel(year=s).mean("year") for s in (slice(2010), slice(2081, None)))
    np.testing.assert_allclose(100 * (after / before - 1), 0, atol=1e-12)


def test_lazy_blocks_give_the_same_bits() -> None:
    indices = invented_indices(range(1991, 2101), (4, 3))
    technology = factors(form="levelling-off", rate=1.0, ceiling=150)
    whole = grids(indices, "log", technology)
    lazy = grids(indices.chunk({"lat": 2, "lon": 1}), "log", technology)
    assert lazy["yield"].chunks is not None
    np.testing.assert_array_equal(lazy["yield"], whole["yield"])


def test_words() -> None:
    words = {
        "linear": "0.5 % of the baseline yield more every year after the baseline",
        "table": "factors of path.csv",
        "constant": "constant",
    }
    contents = (
        {"form": "linear", "rate": 0.5},
        {"form": "table", "file": "other/path.csv"},
        {"form": "constant"},
    )
    for content in contents:
        assert describe_technology(ADAPTER.validate_python(content)) == words[content["form"]]
    levelling = {"form": "levelling-off", "rate": 1, "ceiling": 150}
    assert "levelling off at 150 %" in describe_technology(ADAPTER.validate_python(levelling))
