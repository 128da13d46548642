"""Order statistics in bounded memory are those of all trials sorted."""

import tracemalloc

import numpy as np
import pytest

from budgets.errors import ModelError
from budgets.pooled_trials import BLOCK, CAPACITY, PooledTrials
from budgets.trials import Trials

NORMAL = Trials(lambda generator, size: generator.standard_normal(size))


def sorted_whole(trials, seed, number):
    blocks = range(-(-number // BLOCK))
    values = np.concatenate(
        [
            trials.draw(
                np.random.Generator(np.random.PCG64(np.random.SeedSequence(seed, spawn_key=(k,)))), BLOCK
            )
            for k in blocks
        ]
    )[:number]
    return values


def shortest(values, covered):
    widths = values[covered:] - values[:-covered]
    first = int(np.argmin(widths))
    return values[first], values[first + covered]


@pytest.mark.parametrize("probability", [0.95, 0.5, 0.1])
def test_in_memory(probability):
    number = 50_001
    pool = PooledTrials(NORMAL, 4)
    pool.plan(number)
    covered = int(probability * number)
    ranks = [1, 3, 1250, 25_000, number]
    values, ends = pool.ordered(number, ranks, covered)
    whole = sorted_whole(NORMAL, 4, number)
    assert pool.moments(number) == pytest.approx((whole.mean(), whole.std(ddof=1)), rel=1e-12)
    whole.sort()
    assert values.tolist() == whole[np.array(ranks) - 1].tolist()
    assert ends == shortest(whole, covered)


def by_passes(trials, number, ranks, covered, seed=4):
    pool = PooledTrials(trials, seed)
    pool.plan(number)
    values, ends = pool.ordered(number, ranks, covered)
    whole = sorted_whole(trials, seed, number)
    assert pool.moments(number) == pytest.approx((whole.mean(), whole.std(ddof=1)), rel=1e-9)
    whole.sort()
    assert values.tolist() == whole[np.array(ranks) - 1].tolist()
    return ends, whole


@pytest.mark.parametrize("number", [CAPACITY + 1, 2_000_000])
@pytest.mark.parametrize(
    "trials",
    [
        NORMAL,
        Trials(lambda generator, size: 5 + generator.standard_t(2.5, size)),
        Trials(lambda generator, size: generator.standard_exponential(size)),
    ],
    ids=["normal", "t", "exponential"],
)
def test_by_passes(number, trials):
    covered = int(0.95 * number)
    ranks = [1, 2, 1000, number // 40, number // 2, number - 17, number]
    ends, whole = by_passes(trials, number, ranks, covered)
    low, high = shortest(whole, covered)
    # Sought among edges of cells: as short as the shortest, but for a cell.
    assert high - low <= ends[1] - ends[0] <= (high - low) * 1.001
    assert np.count_nonzero((whole >= ends[0]) & (whole <= ends[1])) == covered + 1


def test_equal_trials_in_crowds():
    clipped = Trials(lambda generator, size: np.maximum(generator.standard_normal(size), 0.0))
    number = 1_500_000
    ends, _ = by_passes(clipped, number, [1, 700_000, 760_000, number], int(0.95 * number))
    assert ends[0] == 0.0
    same = Trials(lambda generator, size: np.full(size, 3.5))
    ends, _ = by_passes(same, number, [1, number // 2, number], int(0.95 * number))
    assert ends == (3.5, 3.5)
    # A crowd that is none when looked at closely.
    tight = Trials(
        lambda generator, size: np.where(generator.random(size) < 0.5, 1.0, generator.random(size) * 1e-9)
    )
    by_passes(tight, number, [1, 1000, 500_000, 1_000_000], int(0.5 * number))


def test_more_trials_begin_with_those_of_fewer():
    few, more = PooledTrials(NORMAL, 9), PooledTrials(NORMAL, 9)
    few.plan(1000)
    more.plan(100_000)
    assert few.first(1000).tolist() == more.first(100_000)[:1000].tolist()


def test_progress_is_told_and_may_end_the_run():
    told = []
    pool = PooledTrials(NORMAL, 1, lambda done, planned: told.append((done, planned)))
    number = CAPACITY + 3 * BLOCK
    pool.plan(number)
    pool.ordered(number, [5], number - 100)
    assert told[0] == (BLOCK, 2 * number) and told[-1] == (2 * number, 2 * number)
    assert [done for done, _ in told] == sorted(done for done, _ in told)

    def stop(done, planned):
        raise InterruptedError

    with pytest.raises(InterruptedError):
        PooledTrials(NORMAL, 1, stop).first(10)


def test_a_trial_that_is_no_number_is_refused():
    wild = Trials(lambda generator, size: np.full(size, np.inf))
    with pytest.raises(ModelError, match="too large"):
        PooledTrials(wild, 1).first(10)


@pytest.mark.slow
def test_memory_does_not_grow_with_the_number_of_trials():
    """A million, and a hundred million."""
    even = Trials(lambda generator, size: generator.random(size))
    peaks = []
    for number in (10**6, 10**8):
        tracemalloc.start()
        pool = PooledTrials(even, 2)
        pool.plan(number)
        covered = int(0.95 * number)
        values, _ = pool.ordered(number, [number // 40, number - number // 40], covered)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
        assert values == pytest.approx([0.025, 0.975], abs=6 * 0.156 / number**0.5)
    assert peaks[1] == pytest.approx(peaks[0], rel=0.1)
