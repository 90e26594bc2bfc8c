"""Flows, PTDF and LODF: by hand on small networks, by identities on random ones."""

import networkx as nx
import numpy as np
import pytest

from simulator.errors import CaseError, OptionError
from simulator.grid import Network, Topology
from tests.grid.networks import balanced, drawn_network, network, whole

SEEDS = range(25)
TRIANGLE = [(0, 1), (1, 2), (0, 2)]


def without(net: Network, *lines: int) -> Topology:
    in_service = np.ones(len(net.line_names), dtype=bool)
    in_service[list(lines)] = False
    return net.topology(in_service)


# By hand


def test_a_triangle_splits_flow_by_the_reactance_of_its_paths():
    """100 MW from 0 to 2: the direct line of 0.2 pu against 0.1 + 0.3 pu takes 0.4/0.6 of it."""
    topology = whole(network(TRIANGLE, [0.1, 0.3, 0.2]))
    flow = topology.flows(np.array([[100.0, 0.0, -100.0]]))
    assert flow[0] == pytest.approx([100 / 3, 100 / 3, 200 / 3])


def test_a_tap_ratio_counts_as_more_reactance():
    """0.2 pu at a ratio of 2 is as 0.4 pu: the same as its two neighbours of 0.1 and 0.3 together."""
    topology = whole(network(TRIANGLE, [0.1, 0.3, 0.2], tap=np.array([1.0, 1.0, 2.0])))
    assert topology.flows(np.array([[100.0, 0.0, -100.0]]))[0] == pytest.approx([50, 50, 50])


def test_circuits_side_by_side_share_by_their_susceptance():
    topology = whole(network([(0, 1), (0, 1), (1, 0)], [0.1, 0.2, 0.2]))
    assert topology.flows(np.array([[80.0, -80.0]]))[0] == pytest.approx([40, 20, -20])


def test_a_phase_shifter_drives_flow_around_a_loop():
    """Two lines of 0.1 and 0.3 pu: −100·φ/(0.1 + 0.3) on the shifted one, as much back on the other."""
    topology = whole(network([(0, 1), (0, 1)], [0.1, 0.3], shift_deg=np.array([5.0, 0.0])))
    around = 100 * np.radians(5) / 0.4
    assert topology.shift_flow == pytest.approx([-around, around])
    injected = topology.flows(np.array([[40.0, -40.0]]))[0]
    assert injected == pytest.approx([30 - around, 10 + around])


def test_a_phase_shifter_on_a_lone_line_changes_no_flow():
    topology = whole(network([(0, 1)], [0.1], shift_deg=7.0))
    assert topology.shift_flow == pytest.approx([0])
    assert topology.flows(np.array([[25.0, -25.0]]))[0] == pytest.approx([25])


def test_a_negative_reactance_in_series_shortens_the_path():
    """0.3 − 0.1 pu against 0.2 pu: both paths alike."""
    topology = whole(network(TRIANGLE, [0.3, -0.1, 0.2]))
    assert topology.flows(np.array([[60.0, 0.0, -60.0]]))[0] == pytest.approx([30, 30, 30])


def test_reactances_that_cancel_are_refused():
    topology = whole(network([(0, 1), (0, 1)], [0.2, -0.2]))
    with pytest.raises(CaseError, match="reactances must not cancel"):
        topology.flows(np.array([[10.0, -10.0]]))


def test_islands_are_counted_from_the_first_bus():
    net = network([(0, 1), (2, 3)], [0.1, 0.1], buses=5)
    assert whole(net).island.tolist() == [0, 0, 1, 1, 2]
    assert whole(net).islands == 3
    assert without(net, 0).island.tolist() == [0, 1, 2, 2, 3]


def test_a_bus_without_lines_needs_no_flows():
    topology = Network(**{
        **vars(network([(0, 1)], [0.1])), "line_names": [], "from_bus": np.zeros(0, int),
        "to_bus": np.zeros(0, int), "susceptance": np.zeros(0), "phase_shift": np.zeros(0), "_made": {},
    }).topology(np.zeros(0, dtype=bool))  # fmt: skip
    assert topology.islands == 2
    assert topology.flows(np.zeros((3, 2))).shape == (3, 0)


# Identities


@pytest.mark.parametrize("seed", SEEDS)
def test_flows_balance_every_bus_and_follow_from_angles(seed):
    """Aᵀ·flow = injection, and around the network flow = b·(A·θ − φ) with one θ for all lines."""
    net = drawn_network(seed, islands=1 + seed % 3)
    topology = whole(net)
    injection = balanced(topology)
    flow = topology.flows(injection)
    incidence = net.incidence.toarray()
    assert incidence.sum(axis=1) == pytest.approx(0)
    np.testing.assert_allclose(flow @ incidence, injection, atol=1e-8)
    drop = flow / net.susceptance + net.phase_shift
    angle = np.linalg.lstsq(incidence, drop.T, rcond=None)[0]
    np.testing.assert_allclose((incidence @ angle).T, drop, atol=1e-9)


@pytest.mark.parametrize("seed", SEEDS)
def test_ptdf_rows_give_the_flows_of_the_factor(seed):
    net = drawn_network(seed, islands=1 + seed % 3)
    topology = whole(net)
    lines = np.arange(len(net.line_names))
    ptdf = topology.ptdf_rows(lines)
    injection = balanced(topology)
    flow = injection @ ptdf.T + topology.shift_flow
    np.testing.assert_allclose(flow, topology.flows(injection), atol=1e-8)
    assert not ptdf[:, topology.reference].any()
    assert (np.diff(topology.island[topology.reference]) > 0).all()
    weight = np.random.default_rng(seed).normal(size=(3, len(lines)))
    np.testing.assert_allclose(topology.collected(weight), weight @ ptdf, atol=1e-9)
    labelled = topology.ptdf([str(net.line_names[-1])])
    np.testing.assert_allclose(labelled.loc[net.line_names[-1]], ptdf[-1], atol=1e-12)


@pytest.mark.parametrize("seed", SEEDS)
def test_susceptance_matrix_is_symmetric_and_its_rows_sum_to_zero(seed):
    matrix = whole(drawn_network(seed, islands=2)).susceptance_matrix.toarray()
    np.testing.assert_allclose(matrix.sum(axis=1), 0, atol=1e-8)
    np.testing.assert_array_equal(matrix, matrix.T)


@pytest.mark.parametrize("seed", SEEDS)
def test_lodf_is_what_a_new_factorisation_without_the_line_finds(seed):
    net = drawn_network(seed, islands=1 + seed % 2)
    topology = whole(net)
    lines = np.arange(len(net.line_names))
    keeps = lines[~topology.splits(lines)]
    factors = topology.lodf(keeps)
    assert factors[keeps, np.arange(len(keeps))] == pytest.approx(-1)
    injection = balanced(topology)
    without_shift = topology.flows(injection) - topology.shift_flow
    for column, line in enumerate(keeps):
        lost = without(net, int(line))
        after = lost.flows(injection) - lost.shift_flow
        taken_over = without_shift + factors[:, column] * without_shift[:, [line]]
        np.testing.assert_allclose(taken_over, after, atol=1e-7)


@pytest.mark.parametrize("seed", SEEDS)
def test_lodf_carries_phase_shifters_too(seed):
    """Flows with shifters, shares of the lost line's flow included, are those found again without it."""
    net = drawn_network(seed)
    topology = whole(net)
    lines = np.arange(len(net.line_names))
    line = int(lines[~topology.splits(lines)][0])
    injection = balanced(topology)
    before = topology.flows(injection)
    after = before + topology.lodf(np.array([line]))[:, 0] * before[:, [line]]
    np.testing.assert_allclose(after, without(net, line).flows(injection), atol=1e-7)


@pytest.mark.parametrize("seed", SEEDS)
def test_splits_tells_the_bridges_of_the_graph(seed):
    net = drawn_network(seed, islands=2)
    graph = nx.MultiGraph()
    graph.add_nodes_from(range(len(net.bus_names)))
    ends = zip(net.from_bus.tolist(), net.to_bus.tolist(), strict=True)
    graph.add_edges_from((start, end, line) for line, (start, end) in enumerate(ends))
    parts = nx.number_connected_components(graph)
    expected = [
        nx.number_connected_components(nx.restricted_view(graph, [], [edge])) > parts
        for edge in sorted(graph.edges(keys=True), key=lambda edge: edge[2])
    ]
    assert whole(net).splits(np.arange(len(net.line_names))).tolist() == expected


def test_a_loss_that_splits_the_network_has_no_factors():
    topology = whole(network([(0, 1), (1, 2), (1, 2)], [0.1, 0.1, 0.1]))
    assert topology.splits(np.arange(3)).tolist() == [True, False, False]
    with pytest.raises(OptionError, match='"line 0"'):
        topology.lodf(np.array([0, 1]))


def test_a_line_out_carries_nothing_and_nothing_is_taken_over_from_it():
    net = network([*TRIANGLE, (0, 2)], [0.1, 0.3, 0.2, 0.2])
    topology = without(net, 3)
    flow = topology.flows(np.array([[100.0, 0.0, -100.0]]))[0]
    assert flow == pytest.approx([100 / 3, 100 / 3, 200 / 3, 0])
    assert not topology.ptdf_rows(np.array([3])).any()
    assert not topology.lodf(np.array([3])).any()
