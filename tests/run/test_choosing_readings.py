"""Which of several readings counts does not depend on the order in which they came."""

from dataclasses import replace

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from meterfix.run.choose import Candidates, DeliveryRank, Ranks, choose

RANKS = {
    1: DeliveryRank(precedence=1, name=0, version=1, judgement=1),
    2: DeliveryRank(precedence=1, name=0, version=2, judgement=1),
    3: DeliveryRank(precedence=1, name=1, version=1, judgement=1),
    4: DeliveryRank(precedence=2, name=2, version=1, judgement=2),
}


def candidates(rows):
    instants, values, deliveries, judgements = (list(c) for c in zip(*rows, strict=True))
    return Candidates(
        np.array(instants, dtype=np.int64),
        np.array(values, dtype=np.float64),
        np.zeros(len(rows), dtype=bool),
        np.array(deliveries, dtype=np.int64),
        np.array(judgements, dtype=np.int64),
        np.zeros(len(rows), dtype=bool),
    )


def chosen(rows):
    result = choose(candidates(rows), Ranks.of(RANKS))
    return list(
        zip(result.instants.tolist(), result.values.tolist(), result.disputed.tolist(), strict=True)
    )


def test_later_version_of_one_file_replaces_the_earlier():
    """Delivery 2 is a later version of delivery 1's file: its value stands, undisputed."""
    assert chosen([(10, 5.0, 1, 1), (10, 6.0, 2, 1)]) == [(10, 6.0, False)]


def test_row_absent_from_the_later_version_is_kept():
    """A new version that lacks a row does not remove it."""
    assert chosen([(10, 5.0, 1, 1), (20, 7.0, 2, 1)]) == [(10, 5.0, False), (20, 7.0, False)]


def test_other_file_with_another_value_is_disputed_and_the_lowest_stands():
    """Two names of one precedence disagree: nobody guesses which is right."""
    assert chosen([(10, 6.0, 2, 1), (10, 5.5, 3, 1)]) == [(10, 5.5, True)]


def test_equal_values_of_two_files_are_no_dispute():
    """The same value twice is one reading."""
    assert chosen([(10, 6.0, 2, 1), (10, 6.0, 3, 1)]) == [(10, 6.0, False)]


def test_precedence_of_sources_wins_over_all_else():
    """The source with the lower number counts, even if the other came first."""
    assert chosen([(10, 1.0, 4, 2), (10, 6.0, 3, 1)]) == [(10, 6.0, False)]


def test_replaced_value_no_longer_disputes():
    """Version 1 disagreed with another file; version 2 agrees with it: settled."""
    rows = [(10, 5.0, 1, 1), (10, 6.0, 3, 1), (10, 6.0, 2, 1)]
    assert chosen(rows) == [(10, 6.0, False)]


@given(st.randoms(use_true_random=False))
def test_of_equal_values_one_of_good_quality_stands(random):
    """A doubtful reading and a good one of the same value, in any order, give a good one.

    Where the good one says something else, both stay in dispute as ever, and the lowest stands.
    """
    rows = [
        (10, 5.0, 3, 1, True),
        (10, 5.0, 2, 1, False),
        (20, 1.0, 3, 1, True),
        (20, 2.0, 2, 1, False),
    ]
    random.shuffle(rows)
    found = candidates([row[:4] for row in rows])
    found = replace(found, doubtful=np.array([row[4] for row in rows]))
    result = choose(found, Ranks.of(RANKS))
    assert result.values.tolist() == [5.0, 1.0]
    assert result.doubtful.tolist() == [False, True]
    assert result.disputed.tolist() == [False, True]


def test_a_later_version_that_doubts_a_value_is_believed():
    """Version 2 of a file calls the value of version 1 doubtful: the reading is doubtful."""
    found = candidates([(10, 5.0, 1, 1), (10, 5.0, 2, 1)])
    found = replace(found, doubtful=np.array([False, True]))
    assert choose(found, Ranks.of(RANKS)).doubtful.tolist() == [True]


def test_superseded_judgement_and_unknown_delivery_do_not_count():
    """Only the judgement that counts gives readings; a delivery without a rank gives none."""
    assert chosen([(10, 1.0, 4, 1), (20, 2.0, 4, 2), (30, 3.0, 9, 1)]) == [(20, 2.0, False)]


def test_nothing_known_gives_nothing():
    """Without deliveries there are no readings."""
    types = (np.int64, float, bool, np.int64, np.int64, bool)
    empty = Candidates(*(np.zeros(0, dtype=t) for t in types))
    assert len(choose(empty, Ranks.of({})).instants) == 0


@given(
    st.lists(
        st.tuples(
            st.integers(0, 6),
            st.sampled_from([1.0, 2.0, 3.0]),
            st.sampled_from([1, 2, 3, 4]),
            st.sampled_from([1, 2]),
        ),
        min_size=1,
        max_size=40,
        unique_by=lambda row: (row[0], row[2], row[3]),
    ),
    st.randoms(use_true_random=False),
)
def test_order_of_arrival_does_not_matter(rows, random):
    """Any order of the same candidates gives the same readings, each instant once."""
    shuffled = list(rows)
    random.shuffle(shuffled)
    first = chosen(rows)
    assert chosen(shuffled) == first
    instants = [instant for instant, _, _ in first]
    assert instants == sorted(set(instants))
