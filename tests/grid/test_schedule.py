"""Topologies by period, and the cells that islands leave when they split and join."""

import numpy as np
import pytest

from simulator.grid import common_cells
from tests.grid.networks import balanced, drawn_network, network


def in_service(net, *out):
    """Lines in service, array (period, line), from the lines out in each period."""
    service = np.ones((len(out), len(net.line_names)), dtype=bool)
    for period, lines in enumerate(out):
        service[period, list(lines)] = False
    return service


def test_each_topology_is_made_once_in_order_of_first_use():
    net = drawn_network(1)
    schedule = net.schedule(in_service(net, [2], [], [2], [0, 1], []))
    assert schedule.index.tolist() == [0, 1, 0, 2, 1]
    assert [int((~topology.in_service).sum()) for topology in schedule.topologies] == [1, 0, 2]
    assert net.schedule(in_service(net, [])).topologies[0] is schedule.topologies[1]
    assert schedule[1:4].index.tolist() == [1, 0, 2]


@pytest.mark.parametrize("seed", range(8))
def test_flows_of_a_schedule_are_those_of_each_period_alone(seed):
    net = drawn_network(seed)
    random = np.random.default_rng(seed)
    service = random.random((6, len(net.line_names))) > 0.2
    schedule = net.schedule(service)
    injection, weight = np.zeros((6, len(net.bus_names))), random.normal(size=service.shape)
    for period, lines in enumerate(service):
        injection[period] = balanced(net.topology(lines), 1, seed)
    flow, shift = schedule.flows(injection), schedule.shift_flow()
    collected = schedule.collected(weight)
    for period, lines in enumerate(service):
        alone = net.topology(lines)
        np.testing.assert_allclose(flow[period], alone.flows(injection[[period]])[0], atol=1e-8)
        np.testing.assert_allclose(shift[period], alone.shift_flow, atol=1e-8)
        found = alone.collected(weight[[period]])[0]
        np.testing.assert_allclose(collected[period], found, atol=1e-9)
        assert not flow[period, ~lines].any()


def test_a_chain_cut_in_two_places_leaves_three_cells():
    chain = network([(0, 1), (1, 2), (2, 3)], [0.1, 0.1, 0.1])
    cells = common_cells(chain.schedule(in_service(chain, [], [0], [2])).topologies)
    assert cells.cell.tolist() == [0, 1, 1, 2]
    assert cells.count == 3
    pairs = list(zip(cells.pair_from.tolist(), cells.pair_to.tolist(), strict=True))
    joined = [{pair for pair, on in zip(pairs, row, strict=True) if on} for row in cells.joined]
    assert joined == [{(0, 1), (0, 2)}, {(1, 2)}, {(0, 1)}]


@pytest.mark.parametrize("seed", range(12))
def test_cells_and_their_pairs_rebuild_the_islands_of_every_topology(seed):
    """Buses of a cell are never apart, and the pairs joined in a topology join just its islands."""
    net = drawn_network(seed, islands=2)
    service = np.random.default_rng(seed).random((5, len(net.line_names))) > 0.35
    topologies = net.schedule(service).topologies
    cells = common_cells(topologies)
    for topology, joined in zip(topologies, cells.joined, strict=True):
        group = np.arange(cells.count)
        for start, end in zip(cells.pair_from[joined], cells.pair_to[joined], strict=True):
            assert group[start] != group[end], "exchange that is there twice"
            group[group == group[end]] = group[start]
        same_island = topology.island[:, None] == topology.island[None, :]
        same_group = group[cells.cell][:, None] == group[cells.cell][None, :]
        np.testing.assert_array_equal(same_group, same_island)
