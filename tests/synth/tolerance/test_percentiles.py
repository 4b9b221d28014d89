"""Percentiles of rows that come block by block, against those of all numbers at once."""

import numpy as np
import pytest

from synth.tolerance import percentiles
from synth.tolerance.percentiles import RowPercentiles, percentiles_of_rows

BLOCK = 50


@pytest.fixture(autouse=True)
def _few_numbers_are_enough(monkeypatch):
    monkeypatch.setattr(percentiles, "LEAST", 400)
    monkeypatch.setattr(percentiles, "STORE", 0)


def streamed(rows):
    """The rows, in blocks of which the last may be short."""
    running = RowPercentiles(rows.shape[0], rows.shape[1], BLOCK)
    for start in range(0, rows.shape[1], BLOCK):
        running.add(rows[:, start : start + BLOCK].copy())
    return running.found()


def numpys(rows):
    return np.percentile(rows.astype(float), [5, 95], axis=1)


def drawn(count, seed=1):
    """Rows of very different shapes and sizes."""
    generator = np.random.default_rng(seed)
    return np.array(
        [
            generator.normal(size=count),
            1e-2 * generator.uniform(size=count) + 1,
            -generator.exponential(size=count) * 1e9,
            np.where(generator.uniform(size=count) < 0.5, -1, 1) * generator.uniform(5, 6, count),
        ],
        dtype=np.float32,
    )


@pytest.mark.parametrize("count", [1, 2, 399, 400, 401, 1000, 12_345])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_percentiles_are_those_of_all_numbers(count, seed):
    """Exactly, whether all were kept or most let go; against numpy's to rounding."""
    rows = drawn(count, seed)
    found, lost = streamed(rows)
    assert not lost.size
    np.testing.assert_allclose(found, numpys(rows), rtol=1e-12)
    np.testing.assert_array_equal(found, percentiles_of_rows(rows.copy()))


def test_memory_grows_like_the_root_of_the_numbers():
    """A hundred times as many need about ten times the space for what lies near a percentile."""
    room = []
    for total in (10_000, 1_000_000):
        running = RowPercentiles(4, total, BLOCK)
        for _ in range(9):
            running.add(drawn(BLOCK))
        room.append(running._windows[0]._kept.shape[1] - 2 * BLOCK)
    assert 8 < room[1] / room[0] < 12


def test_the_window_narrows_when_it_is_full(monkeypatch):
    """With little room the window is drawn closer many times, and still holds the percentile."""
    monkeypatch.setattr(percentiles, "ROOM", 1.05)
    narrowed = []
    narrow = percentiles._Window._narrow

    def counted(self, row, kept, seen):
        narrowed.append(seen)
        narrow(self, row, kept, seen)

    monkeypatch.setattr(percentiles._Window, "_narrow", counted)
    rows = drawn(30_000)
    found, lost = streamed(rows)
    assert len(set(narrowed)) > 5
    assert not lost.size
    np.testing.assert_array_equal(found, percentiles_of_rows(rows))


def test_a_row_that_cannot_be_followed_is_named_and_the_others_are_right():
    """Rising numbers, equal ones, no numbers, infinite ones."""
    count = 9000
    rows = np.concatenate(
        [
            drawn(count),
            [np.arange(count)],
            [np.full(count, 2.0)],
            [np.full(count, np.nan)],
            [np.full(count, np.inf)],
        ]
    ).astype(np.float32)
    found, lost = streamed(rows)
    assert {4, 6, 7} <= set(lost) <= {4, 5, 6, 7}
    kept = np.setdiff1d(np.arange(8), lost)
    np.testing.assert_array_equal(found[:, kept], percentiles_of_rows(rows)[:, kept])
    assert np.isnan(found[:, lost]).any(axis=0).all()


def test_no_number_counts_as_larger_than_any():
    """A tenth of the numbers missing: the 95th percentile is one of these, the 5th is that of the
    rest with as many larger ones."""
    rows = np.tile(np.arange(5000, dtype=np.float32), (2, 1))
    np.random.default_rng(3).shuffle(rows[0])
    rows[1] = rows[0]
    rows[0, rows[0] >= 4500] = np.nan
    found, lost = streamed(rows)
    assert found[0, 1] == pytest.approx(249.95)
    assert found[0, 0] == found[0, 1]
    assert np.isnan(found[1, 0])
    assert lost.tolist() in ([], [0])
