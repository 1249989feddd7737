"""Draws by owner and block: who computes them, and in what order, changes nothing."""

from threading import Thread

import numpy as np
import pytest
from scipy import special

from service.errors import InvalidValue
from service.risk import streams
from service.risk.streams import BLOCK, MAX_DIMENSIONS, SCRAMBLINGS, RandomDraw, Scratch, SobolSequence, stream

FALSE_ALARM = 4.0  # standard errors: 6e-5


def sequence(scrambling=0, *, seed=1, owner="factors", dimensions=5, exponent=14):
    return SobolSequence.of(seed, owner, scrambling, dimensions=dimensions, exponent=exponent)


def points(of, blocks=None):
    blocks = range(of.blocks) if blocks is None else blocks
    return np.concatenate([of.draw(block).uniforms(of.shift.size) for block in blocks], axis=1)


# random streams


def test_a_stream_is_what_it_always_was():
    """The numbers are part of what callers rely on: a change here changes every simulated figure."""
    assert stream(1, "factors", 0).bit_generator.random_raw() == 12999401067387510850
    assert stream(2**53 - 1, "sub_portfolio/hull/2", 7).bit_generator.random_raw() == 11562720911945557341


def test_streams_differ_by_seed_owner_and_block():
    firsts = {
        stream(seed, owner, block).bit_generator.random_raw()
        for seed in range(5)
        for owner in ("factors", "sub_portfolio/hull/0", "sub_portfolio/hull/1", "1 factors")
        for block in (0, 1, 2, 2**40)
    }
    assert len(firsts) == 5 * 4 * 4


def test_streams_of_one_owner_are_uncorrelated_across_blocks():
    first, second = (stream(1, "factors", block).standard_normal(1 << 16) for block in (0, 1))
    assert abs(np.mean(first * second)) < FALSE_ALARM / 2**8


def test_threads_draw_the_same_as_one_after_the_other():
    expected = [RandomDraw(stream(1, "factors", block)).normals(3).copy() for block in range(8)]
    found = [None] * 8

    def work(blocks):
        scratch = Scratch()
        for block in blocks:
            found[block] = RandomDraw(stream(1, "factors", block), scratch=scratch).normals(3).copy()

    threads = [Thread(target=work, args=(blocks,)) for blocks in ((6, 1, 0, 5), (7, 3, 2, 4))]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    np.testing.assert_array_equal(found, expected)


def test_random_draws_have_their_laws():
    draw = RandomDraw(stream(1, "test", 0), 1 << 17)
    uniforms, normals, exponentials = draw.uniforms(2), draw.normals(2), draw.exponentials(2)
    for draws, mean, variance in ((uniforms, 0.5, 1 / 12), (normals, 0.0, 1.0), (exponentials, 1.0, 1.0)):
        assert draws.shape == (2, 1 << 17)
        assert abs(draws.mean() - mean) < FALSE_ALARM * np.sqrt(variance / draws.size)
    assert np.all((uniforms > 0.0) & (uniforms < 1.0))
    assert np.all(exponentials > 0.0)


def test_a_uniform_of_0_is_replaced():
    class Zeros:
        def random(self, out):
            out[...] = 0.0
            return out

        standard_exponential = random

    draw = RandomDraw(Zeros(), 4)
    assert np.all(draw.uniforms(1) == 2.0**-54)
    assert np.all(draw.exponentials(1) > 0.0)


def test_scratch_is_used_again_by_the_next_draw_and_never_by_the_same():
    scratch = Scratch()
    first = RandomDraw(stream(1, "factors", 0), 100, scratch)
    a, b = first.normals(3), first.normals(3)
    assert not np.shares_memory(a, b)
    second = RandomDraw(stream(1, "factors", 1), 100, scratch)
    c, d = second.normals(3), second.uniforms(7)
    assert np.shares_memory(a, c)
    assert d.shape == (7, 100)
    assert d.flags.c_contiguous


# Sobol points


def test_unscrambled_points_are_those_of_scipy():
    from scipy.stats import qmc  # noqa: TID251  # two seconds, for the oracle alone

    dimensions = 2000
    numbers = streams._direction_numbers(dimensions)
    plain = SobolSequence(1, "", 0, 8, numbers, np.zeros(dimensions, dtype=np.uint64))
    found = plain.points(0, 0, np.empty((dimensions, 256))) - 2.0**-53
    expected = qmc.Sobol(dimensions, scramble=False, bits=52).random(256)
    gray = np.arange(256) ^ (np.arange(256) >> 1)  # the order in which scipy goes through them
    np.testing.assert_array_equal(found[:, gray].T, expected)


@pytest.mark.parametrize("exponent", [3, 12, 14])
def test_each_dimension_has_one_point_in_each_interval(exponent):
    found = points(sequence(exponent=exponent, dimensions=40))
    assert found.shape == (40, 2**exponent)
    cells = np.sort((found * 2**exponent).astype(int), axis=1)
    np.testing.assert_array_equal(cells, np.tile(np.arange(2**exponent), (40, 1)))
    assert np.all((found > 0.0) & (found < 1.0))


def test_pairs_of_dimensions_fill_the_square_evenly():
    """The first two dimensions are a (0, m, 2)-net: one point in each of the 2^6 × 2^8 boxes."""
    first, second = points(sequence(dimensions=2))
    boxes = (first * 64).astype(int) * 256 + (second * 256).astype(int)
    assert np.unique(boxes).size == 1 << 14


def test_any_block_in_any_order_gives_the_same_points():
    of = sequence()
    whole = points(of)
    again = sequence()
    for block in (3, 0, 2, 1):
        np.testing.assert_array_equal(again.draw(block).uniforms(5), whole[:, BLOCK * block : BLOCK * (block + 1)])


def test_numbers_are_asked_for_dimension_by_dimension():
    of = sequence()
    together = of.draw(1).uniforms(5)
    draw = of.draw(1)
    np.testing.assert_array_equal(np.vstack([draw.uniforms(2), draw.uniforms(0), draw.uniforms(3)]), together)
    draw = of.draw(1)
    np.testing.assert_allclose(draw.normals(2), special.ndtri(together[:2]))
    np.testing.assert_allclose(draw.exponentials(3), -np.log1p(-together[2:]))
    with pytest.raises(IndexError, match="5 dimensions"):
        draw.uniforms(1)


def test_longer_and_wider_sequences_begin_with_the_same_numbers():
    short = points(sequence(exponent=12, dimensions=3))
    np.testing.assert_array_equal(short, sequence(exponent=20, dimensions=7).draw(0).uniforms(3))


def test_the_last_block_of_the_longest_sequence_costs_no_more_than_the_first():
    of = sequence(exponent=32)
    assert of.blocks == 1 << 20
    found = of.draw(of.blocks - 1).uniforms(5)
    assert np.all((found > 0.0) & (found < 1.0))


def test_scramblings_seeds_and_owners_differ():
    firsts = {
        float(sequence(number, seed=seed, owner=owner).draw(0).uniforms(1)[0, 0])
        for number in range(SCRAMBLINGS)
        for seed in (1, 2)
        for owner in ("factors", "others")
    }
    assert len(firsts) == SCRAMBLINGS * 4


def test_the_generator_beside_the_points_is_its_own_in_each_block_and_scrambling():
    draws = {sequence(number).draw(block).generator.random() for number in range(3) for block in range(3)}
    assert len(draws) == 9


def test_the_mean_of_a_smooth_function_is_far_more_certain_than_at_random():
    """Eight scramblings of 2^13 points against as many random ones, whose spread is the standard deviation / 2^6.5."""

    def function(uniforms):
        return np.prod(1.0 + 0.5 * (uniforms - 0.5), axis=0)

    means = [function(points(sequence(number, exponent=13))).mean() for number in range(SCRAMBLINGS)]
    sd = np.sqrt((1.0 + 0.25 / 12) ** 5 - 1.0)
    assert np.std(means, ddof=1) < 0.01 * sd / 2**6.5
    error = np.std(means, ddof=1) / np.sqrt(SCRAMBLINGS)
    assert abs(np.mean(means) - 1.0) < special.stdtrit(SCRAMBLINGS - 1, 1.0 - 3e-5) * error


def test_scrambled_points_are_uniform_over_scramblings():
    """Any one point of 1000 scramblings: mean, square and a digit of low order."""
    of = np.array([sequence(number, dimensions=2, exponent=3).draw(0).uniforms(2)[:, 5] for number in range(1000)])
    assert np.all(np.abs(of.mean(axis=0) - 0.5) < FALSE_ALARM * np.sqrt(1 / 12 / 1000))
    assert np.all(np.abs((of**2).mean(axis=0) - 1 / 3) < FALSE_ALARM * np.sqrt(4 / 45 / 1000))
    low = (of * 2**40).astype(np.int64) & 1
    assert np.all(np.abs(low.mean(axis=0) - 0.5) < FALSE_ALARM * 0.5 / np.sqrt(1000))


def test_there_is_an_end_of_dimensions_and_points():
    with pytest.raises(InvalidValue, match=f"at most {MAX_DIMENSIONS} dimensions"):
        sequence(dimensions=MAX_DIMENSIONS + 1)
    with pytest.raises(InvalidValue, match=r"at most 2\^32"):
        sequence(exponent=33)
