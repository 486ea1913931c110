from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from anneal_ref.base.errors import InputError
from anneal_ref.observe.clusters import Clusters


@given(st.lists(st.integers(-3, 3), min_size=2, max_size=30))
def test_every_shot_is_in_one_cluster(labels: list[int]) -> None:
    clusters = Clusters.of(len(labels), labels)
    parts = list(clusters)
    assert sorted(np.concatenate(parts).tolist()) == list(range(len(labels)))
    assert [len(part) for part in parts] == clusters.sizes.tolist()
    if 1 < len(set(labels)) < len(labels):
        assert all(len({labels[k] for k in part}) == 1 for part in parts)
        assert len(clusters) == len(set(labels))
    else:
        assert clusters.independent
    together = sum(a == b for a in labels for b in labels) if not clusters.independent else len(labels)
    assert clusters.spread == pytest.approx(1 - together / len(labels) ** 2)


def test_equal_clusters_have_one_degree_of_freedom_less_than_there_are() -> None:
    assert Clusters.of(12, [0, 1, 2, 3] * 3).freedom == pytest.approx(3)
    assert Clusters.of(12).freedom == pytest.approx(11)
    # a giant among dwarfs is hardly more than one cluster
    assert Clusters.of(100, [0] * 90 + list(range(1, 11))).freedom < 0.3


def test_sums_and_error_of_the_mean() -> None:
    values = np.array([1.0, 5.0, 2.0, 8.0])
    clusters = Clusters.of(4, [7, 3, 7, 3])
    assert clusters.sums(values).tolist() == [13.0, 3.0]
    # cluster means 6.5 and 1.5: standard error of their mean is |6.5 - 1.5|/2
    assert float(clusters.error_of_mean(values)) == pytest.approx(2.5)
    assert float(Clusters.of(4).error_of_mean(values)) == pytest.approx(values.std(ddof=1) / 2)


def test_bad_labels_are_refused() -> None:
    with pytest.raises(InputError, match="at least 2 shots"):
        Clusters.of(1)
    with pytest.raises(InputError, match="shape"):
        Clusters.of(3, [1, 2])
    with pytest.raises(InputError, match="finite"):
        Clusters.of(2, [1.0, np.nan])


def test_what_is_left_out_is_the_rest() -> None:
    clusters = Clusters.of(7, [2, 2, 0, 1, 1, 1, 0])
    for shots, rest in zip(clusters, clusters.left_out(), strict=True):
        assert sorted([*shots, *rest]) == list(range(7))
