"""Production under coefficient draws: against plain loops, and in any order and part."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy import sparse
from stook.audit.plain.yields import yields_of_pixel
from stook.yields.coefficients import coefficient_draws
from stook.yields.draws import DrawTotals, draw_totals
from stook.yields.response import Response
from stook.yields.response_terms import design_matrix
from yields_inputs import invented_indices, response, with_product

YEARS = range(1991, 2031)
BASELINE = (1991, 2010)
INSIDE = np.array([BASELINE[0] <= year <= BASELINE[1] for year in YEARS])


class Case:
    """A block of invented pixels in three regions, two of which overlap."""

    def __init__(
        self,
        link: str = "log",
        draws: int = 40,
        shape: tuple[int, int] = (4, 6),
        model: Response | None = None,
    ) -> None:
        self.model = model or response(link)
        self.indices = invented_indices(YEARS, shape)
        self.design = design_matrix(self.model, self.indices)
        random = np.random.default_rng(2)
        pixels = len(self.design)
        self.baseline_yield = random.uniform(3, 8, pixels)
        self.weights = np.zeros((3, pixels))
        self.weights[0, : pixels // 2] = random.uniform(10, 900, pixels // 2)
        self.weights[1, pixels // 2 : -2] = random.uniform(10, 900, pixels - 2 - pixels // 2)
        self.weights[2, ::3] = random.uniform(1, 50, len(range(0, pixels, 3)))
        self.valid = np.isfinite(self.design).all(axis=-1)
        table = coefficient_draws(self.model, draws, seed=5)
        self.coefficients = table[self.model.coefficient_names].to_numpy(copy=True)

    def totals(self, pixels: slice = slice(None), regions: slice = slice(None)) -> np.ndarray:
        return draw_totals(
            self.design[pixels],
            self.valid[pixels],
            self.coefficients,
            self.model.intercept,
            self.model.link == "log",
            INSIDE,
            self.baseline_yield[pixels],
            self.weights[regions, pixels],
        )

    def plain(self, draws: range) -> np.ndarray:
        """Sum plain yields pixel by pixel, (draw, region, year)."""
        result = np.zeros((len(draws), 3, len(YEARS)))
        columns = self.indices.sizes["lon"]
        for number, draw in enumerate(draws):
            for pixel in range(len(self.design)):
                at = divmod(pixel, columns)
                series = {
                    name: dict(
                        zip(YEARS, self.indices[name].values[:, at[0], at[1]].tolist(), strict=True)
                    )
                    for name in self.model.indices
                }
                found = yields_of_pixel(
                    self.model,
                    self.coefficients[draw].tolist(),
                    series,
                    BASELINE,
                    float(self.baseline_yield[pixel]),
                )
                for region in np.flatnonzero(self.weights[:, pixel]):
                    for k, year in enumerate(YEARS):
                        result[number, region, k] += self.weights[region, pixel] * found.yields.get(
                            year, np.nan
                        )
        return result


@pytest.mark.parametrize("link", ["log", "level"])
def test_same_as_plain_loops(link: str) -> None:
    case = Case(link)
    draws = range(0, 41, 4)
    np.testing.assert_allclose(case.totals()[list(draws)], case.plain(draws), rtol=1e-12)


@pytest.mark.parametrize("link", ["log", "level"])
def test_same_as_plain_loops_with_a_product(link: str) -> None:
    case = Case(link, shape=(2, 3), model=with_product(link))
    draws = range(0, 41, 8)
    np.testing.assert_allclose(case.totals()[list(draws)], case.plain(draws), rtol=1e-12)
    assert not np.allclose(case.totals(), Case(link, shape=(2, 3)).totals(), rtol=1e-3)


@pytest.mark.parametrize("link", ["log", "level"])
def test_same_as_plain_loops_with_marginal_effects_held(link: str) -> None:
    case = Case(link, shape=(2, 3), model=with_product(link, extrapolation="hold"))
    draws = range(0, 41, 8)
    np.testing.assert_allclose(case.totals()[list(draws)], case.plain(draws), rtol=1e-12)
    flag = Case(link, shape=(2, 3), model=with_product(link))
    assert not np.allclose(case.totals(), flag.totals(), rtol=1e-4)


def test_inside_the_range_held_draws_are_the_same_bits() -> None:
    totals = []
    for extrapolation in ("flag", "hold"):
        model = with_product(extrapolation=extrapolation)
        case = Case(model=model)
        inside = {n: case.indices[n].clip(*model.estimation_range[n]) for n in model.indices}
        case.design = design_matrix(model, case.indices.assign(inside))
        totals.append(case.totals())
    assert np.array_equal(*totals)


def test_percentiles_over_draws_are_those_of_a_plain_loop() -> None:
    case = Case(shape=(2, 3))
    found = np.percentile(case.totals()[1:], [5, 17, 50, 83, 95], axis=0)
    expected = np.percentile(case.plain(range(1, 41)), [5, 17, 50, 83, 95], axis=0)
    np.testing.assert_allclose(found, expected, rtol=1e-12)


@pytest.mark.parametrize("link", ["log", "level"])
def test_the_baseline_mean_is_area_times_baseline_yield(link: str) -> None:
    case = Case(link)
    found = case.totals()[:, :, INSIDE].mean(axis=2)
    expected = case.weights @ case.baseline_yield
    np.testing.assert_allclose(found, np.tile(expected, (41, 1)), rtol=1e-12)


@pytest.mark.parametrize("link", ["log", "level"])
def test_same_bits_in_any_blocks_of_pixels(link: str) -> None:
    case = Case(link)
    case.valid[7, 30] = False
    whole = case.totals()
    for cuts in ([0, 24], [0, 1, 24], [0, 7, 8, 20, 24], list(range(25))):
        sums = DrawTotals(case.coefficients, case.model.intercept, link == "log", INSIDE, 3)
        for first, last in itertools.pairwise(cuts):
            part = slice(first, last)
            sums.add(
                case.design[part],
                case.valid[part],
                case.baseline_yield[part],
                case.weights[:, part],
            )
        assert np.array_equal(sums.production, whole, equal_nan=True)


@pytest.mark.parametrize("region", [0, 1, 2])
def test_same_bits_for_one_region_alone(region: int) -> None:
    case = Case()
    whole = case.totals()
    one = slice(region, region + 1)
    assert np.array_equal(case.totals(regions=one), whole[:, one])
    used = np.flatnonzero(case.weights[region])
    alone = case.totals(pixels=slice(used[0], used[-1] + 1), regions=one)
    assert np.array_equal(alone, whole[:, one])


@pytest.mark.parametrize("draws", [0, 1, 7, 8, 127, 128, 200, 300])
def test_same_bits_for_any_number_of_draws(draws: int) -> None:
    """A draw does not depend on those beside it: 301 rows are worked on in three blocks."""
    many = Case(draws=300, shape=(2, 3))
    few = Case(draws=draws, shape=(2, 3))
    assert np.array_equal(few.totals(), many.totals()[: draws + 1])


@pytest.mark.parametrize("size", [1, 3, 4, 5, 8, 9])
def test_any_number_of_terms(size: int) -> None:
    """numpy, whole arrays."""
    random = np.random.default_rng(size)
    design = random.normal(0, 0.5, (5, len(YEARS), size))
    coefficients = random.normal(0, 0.3, (9, size))
    weights = np.ones((1, 5))
    found = draw_totals(
        design,
        np.ones((5, len(YEARS)), bool),
        coefficients,
        0.0,
        True,
        INSIDE,
        np.ones(5),
        weights,
    )
    level = np.exp(np.einsum("pyk,dk->dpy", design, coefficients))
    ratio = level / level[:, :, INSIDE].mean(axis=2, keepdims=True)
    np.testing.assert_allclose(found[:, 0], ratio.sum(axis=1), rtol=1e-12)


def test_a_missing_year_of_a_pixel_makes_its_regions_missing_in_that_year() -> None:
    case = Case()
    case.valid[3, 25] = False
    case.design[3, 25] = np.nan
    found = case.totals()
    missing = np.isnan(found)
    expected = np.zeros_like(missing)
    expected[:, [0, 2], 25] = True  # pixel 3 lies in the first and the third region
    np.testing.assert_array_equal(missing, expected)


def test_a_missing_baseline_year_is_left_out_of_the_mean() -> None:
    case = Case(shape=(1, 3))
    case.valid[0, 4] = False
    case.design[0, 4] = np.nan
    case.indices["heat"][4, 0, 0] = np.nan
    np.testing.assert_allclose(case.totals()[:3], case.plain(range(3)), rtol=1e-12)


def test_a_pixel_left_out_has_no_weight_and_does_not_matter() -> None:
    case = Case()
    case.weights[:, 3] = 0.0
    without = case.totals()
    case.design[3] = np.nan
    case.valid[3] = False
    assert np.array_equal(case.totals(), without)
    assert not np.isnan(without).any()


def test_a_draw_whose_baseline_is_not_positive_has_no_production() -> None:
    case = Case("level")
    case.coefficients[5] = -np.abs(case.coefficients[5]) * 10
    found = case.totals()
    assert np.isnan(found[5]).all()
    assert not np.isnan(np.delete(found, 5, axis=0)).any()


def test_sparse_weights_are_the_same_as_dense() -> None:
    case = Case()
    dense = case.totals()
    case.weights = sparse.csr_array(case.weights)
    assert np.array_equal(case.totals(), dense)


def test_a_large_constant_in_the_predictor_cancels() -> None:
    """exp(h) alone would overflow: h is about 3000."""
    case = Case()
    expected = case.totals()
    case.design = np.concatenate([case.design, np.full((24, len(YEARS), 1), 3000.0)], axis=2)
    ones = np.ones((len(case.coefficients), 1))
    case.coefficients = np.concatenate([case.coefficients, ones], axis=1)
    np.testing.assert_allclose(case.totals(), expected, rtol=1e-9)
