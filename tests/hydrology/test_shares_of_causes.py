"""Shares of causes (Shapley, 1953): they sum to the change and depend on no order."""

from __future__ import annotations

from collections.abc import Callable
from itertools import permutations

import numpy as np
import pytest

from wrackline.hydrology.attribution import share_change

CAUSES = ["record", "skew", "models", "choices"]
Evaluate = Callable[[frozenset[str]], np.ndarray]


def random_game(seed: int) -> Evaluate:
    """Estimates at three sites for every set of causes, drawn once each."""
    values: dict[frozenset[str], np.ndarray] = {}
    stream = np.random.default_rng(seed)

    def evaluate(acted: frozenset[str]) -> np.ndarray:
        if acted not in values:
            values[acted] = stream.normal(size=3)
        return values[acted]

    return evaluate


def test_two_causes_that_act_only_together_share_alike() -> None:
    shares = share_change(["a", "b"], lambda acted: np.array([10.0 * (len(acted) == 2)]))
    assert (5.0, 5.0) == (shares["a"][0], shares["b"][0])


def test_effects_that_add_are_given_back() -> None:
    effect = {"record": 3.0, "skew": -1.0, "models": 0.5, "choices": 0.25}
    shares = share_change(CAUSES, lambda acted: np.array([sum(effect[cause] for cause in acted)]))
    assert effect == pytest.approx({cause: float(share[0]) for cause, share in shares.items()}, abs=1e-14)


def test_cause_without_effect_has_a_share_of_exactly_zero() -> None:
    shares = share_change(
        CAUSES, lambda acted: np.array([1.1 * ("skew" in acted) + 0.1 * ("models" in acted)])
    )
    assert 0.0 == shares["choices"][0]


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_shares_are_the_mean_effect_over_all_orders_and_sum_to_the_change(seed: int) -> None:
    evaluate = random_game(seed)
    shares = share_change(CAUSES, evaluate)
    by_order = {cause: np.zeros(3) for cause in CAUSES}
    for order in permutations(CAUSES):
        for place, cause in enumerate(order):
            before = frozenset(order[:place])
            by_order[cause] += (evaluate(before | {cause}) - evaluate(before)) / 24
    for cause in CAUSES:
        np.testing.assert_allclose(by_order[cause], shares[cause], atol=1e-14)
    change = evaluate(frozenset(CAUSES)) - evaluate(frozenset())
    np.testing.assert_allclose(change, sum(shares.values()), atol=1e-14)


def test_each_set_of_causes_is_evaluated_once() -> None:
    asked: list[frozenset[str]] = []

    def evaluate(acted: frozenset[str]) -> np.ndarray:
        asked.append(acted)
        return np.zeros(1)

    share_change(CAUSES, evaluate)
    assert 16 == len(asked) == len(set(asked))


def test_no_cause_has_no_share() -> None:
    assert {} == share_change([], lambda acted: np.zeros(2))
