"""Flows after losses against the network with the lines removed and factorised again."""

import numpy as np
import pandas as pd
import pytest

from simulator.grid import Contingencies
from tests.grid.networks import balanced, drawn_network, network, whole

SEEDS = range(40)


def drawn_contingencies(net, seed):
    """Every line alone, and some twos and threes."""
    random = np.random.default_rng(seed)
    lines = len(net.line_names)
    groups = [[line] for line in range(lines)]
    groups += [
        random.choice(lines, min(size, lines), replace=False).tolist() for size in (2, 2, 3, 3)
    ]
    sizes = [len(group) for group in groups]
    owner = np.repeat(np.arange(len(groups)), sizes)
    names = pd.Index([f"loss {number}" for number in range(len(groups))])
    return Contingencies(names, owner, np.concatenate(groups)), groups


def without(net, topology, lines):
    left = topology.in_service.copy()
    left[lines] = False
    return net.topology(left)


@pytest.mark.parametrize("islands", [1, 2])
@pytest.mark.parametrize("seed", SEEDS)
def test_flows_after_a_loss_are_those_of_the_network_without_the_lines(seed, islands):
    net = drawn_network(seed, islands=islands, negative=False)
    topology = whole(net)
    contingencies, groups = drawn_contingencies(net, seed)
    injection = balanced(topology, seed=seed)
    flow = topology.flows(injection)
    after = contingencies.after(topology)
    every = np.arange(len(net.line_names))
    seen = []
    for some, flows in after.blocks(flow, every):
        for contingency, found in zip(some, flows, strict=True):
            left = without(net, topology, groups[contingency])
            assert left.islands == topology.islands
            np.testing.assert_allclose(found, left.flows(injection), atol=1e-6)
            weights = after.weights(np.full(len(every), contingency), every)
            np.testing.assert_allclose((weights @ flow.T).T, left.flows(injection), atol=1e-6)
            seen.append(contingency)
    split = [without(net, topology, group).islands > topology.islands for group in groups]
    assert sorted(seen) == np.flatnonzero(~np.array(split)).tolist()
    assert after.splits.tolist() == split


def test_blocks_of_contingencies_are_the_same_as_all_at_once(monkeypatch):
    net = drawn_network(3, negative=False)
    topology = whole(net)
    contingencies, _ = drawn_contingencies(net, 3)
    after, flow = contingencies.after(topology), topology.flows(balanced(topology))
    lines = np.array([2, 0, 5])
    (whole_block,) = after.blocks(flow, lines)
    monkeypatch.setattr("simulator.grid.contingencies._AT_ONCE", 2 * flow.shape[0] * len(lines))
    parts = list(after.blocks(flow, lines))
    assert len(parts) > 3
    np.testing.assert_array_equal(np.concatenate([some for some, _ in parts]), whole_block[0])
    np.testing.assert_allclose(np.concatenate([flows for _, flows in parts]), whole_block[1])


def test_a_line_that_is_out_already_cannot_be_lost():
    net = network([(0, 1), (1, 2), (2, 0), (0, 1)], [0.1, 0.2, 0.1, 0.1])
    topology = net.topology(np.array([True, True, True, False]))
    contingencies = Contingencies(
        pd.Index(["both", "gone", "one"]), np.array([0, 0, 1, 2]), np.array([0, 3, 3, 0])
    )
    after = contingencies.after(topology)
    assert after.idle.tolist() == [False, True, False]
    assert after.owner.tolist() == [0, 2]
    np.testing.assert_allclose(after.factors[:, 0], after.factors[:, 1])
    np.testing.assert_allclose(after.factors[:, 0], topology.lodf(np.array([0]))[:, 0])


def test_the_same_topology_is_worked_out_once():
    net = drawn_network(1)
    contingencies, _ = drawn_contingencies(net, 1)
    assert contingencies.after(whole(net)) is contingencies.after(whole(net))
