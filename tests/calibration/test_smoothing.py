"""Groups of consecutive samples: what is averaged together and what is not."""

from itertools import pairwise

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from calibration.smoothing import Averager, Samples


def samples(carrier, *, clipped=(), gaps=(), kind=None, first=0):
    """Samples numbered in `forward`, with a carrier where told."""
    n = len(carrier)
    number = first + np.arange(n, dtype=float)
    return Samples(
        number,
        -number,
        np.zeros(n, dtype=np.uint8),
        number / 100,
        np.array(carrier, dtype=bool),
        np.isin(np.arange(n), clipped),
        np.isin(np.arange(n), gaps),
        np.full(n, 14.1e6) if kind is None else np.array(kind),
    )


def numbers(groups):
    """The numbers in each group."""
    return [group.forward.astype(int).tolist() for group in groups]


def test_steady_carrier_makes_full_groups():
    """Twelve samples in groups of five: two full ones, the rest waits."""
    averager = Averager(5)
    assert numbers(averager.push(samples([True] * 12))) == [[0, 1, 2, 3, 4], [5, 6, 7, 8, 9]]
    assert averager.waiting == 2


def test_group_is_closed_where_the_carrier_comes_and_goes():
    """Key-down from 3 to 9: no group crosses it, and its first and last sample are left out."""
    carrier = [False] * 3 + [True] * 7 + [False] * 4
    groups = numbers(Averager(20).push(samples(carrier)))
    assert groups == [[0, 1, 2], [4, 5, 6, 7, 8]]


def test_short_key_down_keeps_all_it_has():
    """A dot of two samples stays a group of two."""
    assert numbers(Averager(20).push(samples([False, True, True, False]))) == [[0], [1, 2]]


def test_group_is_closed_at_a_clip_a_gap_and_a_new_frequency():
    """Each of the three ends a group."""
    assert numbers(Averager(9).push(samples([True] * 6, clipped=[3, 4, 5]))) == [[0, 1, 2]]
    assert numbers(Averager(9).push(samples([True] * 6, gaps=[2]))) == [[0, 1]]
    assert numbers(Averager(9).push(samples([True] * 4, kind=[7e6, 7e6, 14e6, np.nan]))) == [[0, 1], [2]]


@given(st.lists(st.booleans(), max_size=60), st.integers(1, 8), st.lists(st.integers(0, 60), max_size=5))
def test_groups_do_not_depend_on_how_samples_arrive(carrier, size, cuts):
    """Pushed at once or in pieces, the groups are the same, in order, none larger than asked, none mixed."""
    whole = Averager(size).push(samples(carrier)) if carrier else []
    averager, pieces = Averager(size), []
    edges = sorted({0, len(carrier), *(min(cut, len(carrier)) for cut in cuts)})
    for start, stop in pairwise(edges):
        pieces += averager.push(samples(carrier[start:stop], first=start))
    assert numbers(pieces) == numbers(whole)
    for group in whole:
        assert 1 <= len(group) <= size
        assert len(set(group.carrier.tolist())) == 1
    flat = [number for group in numbers(whole) for number in group]
    assert flat == sorted(set(flat))
