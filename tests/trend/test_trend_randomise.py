"""The randomisations: the same for every series, and exact."""

from __future__ import annotations

import numpy as np
import pytest
from stook.trend.randomise import Randomisations, block_length, probability, to_integers

YEARS = tuple(range(1961, 2001))
GAPS = (*range(1961, 1970), *range(1972, 2003))


def test_depend_on_seed_length_and_number_only() -> None:
    few, many = Randomisations(3, YEARS, 5), Randomisations(3, YEARS, 50)
    later = Randomisations(3, tuple(year + 30 for year in YEARS), 5)
    for name in ("orders", "shuffled_steps", "shifted_phases"):
        np.testing.assert_array_equal(getattr(few, name), getattr(many, name)[:5])
        np.testing.assert_array_equal(getattr(few, name), getattr(later, name))
    np.testing.assert_array_equal(few.moved_blocks(4), many.moved_blocks(4)[:5])
    assert (few.orders != Randomisations(4, YEARS, 5).orders).any()
    longer = Randomisations(3, (*YEARS, 2001), 5).orders
    assert (few.orders != longer[:, :40]).any()


def test_orders_are_uniform_permutations() -> None:
    orders = Randomisations(1, YEARS, 4000).orders
    np.testing.assert_array_equal(np.sort(orders, axis=1), np.tile(np.arange(40), (4000, 1)))
    # Each year's mean place: 19.5 +- 11.54 / sqrt(4000) = 0.18; five of those.
    np.testing.assert_allclose(orders.mean(axis=0), 19.5, atol=0.92)


@pytest.mark.parametrize("years", [YEARS, GAPS])
def test_weights_stand_for_the_shuffled_series(years: tuple[int, ...]) -> None:
    drawn = Randomisations(1, years, 10)
    y = np.random.default_rng(1).standard_normal(len(years))
    for weights, base in (
        (drawn.shuffled_years, drawn.year_weights),
        (drawn.shuffled_steps, drawn.step_weights),
    ):
        assert base.sum() == 0
        np.testing.assert_array_equal(base, np.rint(base))
        expected = [base @ y[order] for order in drawn.orders]
        np.testing.assert_allclose(weights @ y, expected, atol=1e-9)
    step = np.array(years) - np.mean(years)
    np.testing.assert_allclose(
        drawn.year_weights / drawn.year_weights[-1], step / step[-1], rtol=1e-12
    )


def test_blocks_stand_for_joined_pieces() -> None:
    drawn = Randomisations(1, YEARS, 6)
    # A block of all years is the series itself; one of a single year resamples years.
    np.testing.assert_array_equal(drawn.moved_blocks(40), np.tile(drawn.step_weights, (6, 1)))
    # Blocks of 8 of the series 0, 1, 2 ... are 5 runs of 8 successive numbers.
    ramp = np.arange(40.0)
    for j, weights in enumerate(drawn.moved_blocks(8)):
        starts = np.floor(stream_places(j)[:5] * 33)
        series = (starts[:, None] + np.arange(8)).ravel()
        assert weights @ ramp == pytest.approx(drawn.step_weights @ series)


def stream_places(number: int) -> np.ndarray:
    from stook.randomness import generator

    stream = generator(1, "trend", "blocks", "40")
    return np.stack([stream.random(40) for _ in range(number + 1)])[number]


def test_phases_keep_the_spectrum_of_the_weights() -> None:
    for years in (YEARS, YEARS[:-1]):  # even and odd
        drawn = Randomisations(1, years, 4)
        spectrum = np.abs(np.fft.rfft(drawn.step_weights))
        turned = np.abs(np.fft.rfft(drawn.shifted_phases / 1024.0, axis=1))
        # Rounded to 1/1024: an error of at most n/2048 in a sum of n terms.
        np.testing.assert_allclose(turned, np.tile(spectrum, (4, 1)), atol=len(years) / 2048)


def test_block_lengths_grow_with_correlation() -> None:
    # The rule at n = 60, by trying every length by hand: rho 0.6 gives n'/n = 0.25, power 0.5:
    # 8 >= 53 ** 0.5 = 7.28, and 7 < 54 ** 0.5 = 7.35.
    np.testing.assert_array_equal(block_length(np.array([-0.5, 0.0, 0.6]), 60), [1, 1, 8])
    lengths = block_length(np.linspace(-0.95, 0.95, 50), 60)
    assert (np.diff(lengths) >= 0).all()
    assert lengths.max() <= 30


def test_products_of_whole_numbers_are_exact() -> None:
    """The product of the tests has the same bits in any order, and any block."""
    drawn = Randomisations(1, tuple(range(1800, 2100)), 60)
    values = np.random.default_rng(2).standard_normal((300, 70)) * 10.0 ** np.arange(-35, 35)
    integers, units = to_integers(values, drawn.shuffled_years)
    np.testing.assert_array_equal(integers, np.rint(integers))
    largest = np.abs(values).max(axis=0)
    assert (np.abs(integers * units - values) <= 1e-7 * largest).all()
    product = drawn.shuffled_years @ integers
    backwards = drawn.shuffled_years[:, ::-1] @ integers[::-1]
    np.testing.assert_array_equal(product, backwards)
    for i in range(0, 70, 9):
        np.testing.assert_array_equal(drawn.shuffled_years @ integers[:, i], product[:, i])
    exact = [
        sum(int(w) * int(v) for w, v in zip(drawn.shuffled_years[0], integers[:, i], strict=True))
        for i in range(70)
    ]
    assert [int(one) for one in product[0]] == exact


def test_probability_is_never_zero() -> None:
    # Phipson & Smyth 2010: m = 999, b = 0 -> 0.001.
    assert probability(0, 999) == 0.001
    assert probability(999, 999) == 1.0
    np.testing.assert_array_equal(probability(np.array([0, 49]), 999), [0.001, 0.05])
