"""Random networks for the algebra's tests: trees with more lines, taps, shifters, circuits side by side."""

import numpy as np
import pandas as pd

from simulator.grid import Network, Topology


def network(
    ends: list[tuple[int, int]],
    reactance: list[float] | np.ndarray,
    *,
    buses: int | None = None,
    tap: np.ndarray | float = 1.0,
    shift_deg: np.ndarray | float = 0.0,
) -> Network:
    """Lines by the positions of their ends, reactances in pu on 100 MVA."""
    start, end = np.array(ends).T
    count = buses or int(max(start.max(), end.max())) + 1
    size = len(start)
    return Network(
        line_names=pd.Index([f"line {number}" for number in range(size)]),
        bus_names=pd.Index([f"bus {number}" for number in range(count)]),
        from_bus=start, to_bus=end,
        susceptance=100 / (np.asarray(reactance, dtype=float) * tap) * np.ones(size),
        phase_shift=np.deg2rad(shift_deg) * np.ones(size),
    )  # fmt: skip


def drawn_network(seed: int, *, islands: int = 1, negative: bool = True) -> Network:
    """A connected network an island, with loops, circuits side by side, taps and phase shifters."""
    random = np.random.default_rng(seed)
    ends: list[tuple[int, int]] = []
    first = 0
    for _ in range(islands):
        size = int(random.integers(3, 9))
        ends += [(first + n, first + int(random.integers(0, n))) for n in range(1, size)]
        for _ in range(size):
            one, other = random.choice(size, 2, replace=False)
            ends.append((first + int(one), first + int(other)))
        ends.append(ends[-1])
        first += size
    reactance = random.uniform(0.02, 0.4, len(ends))
    if negative:
        reactance[int(random.integers(len(ends)))] *= -0.3
    tap = np.where(random.random(len(ends)) < 0.3, random.uniform(0.9, 1.1, len(ends)), 1.0)
    shift = np.where(random.random(len(ends)) < 0.2, random.uniform(-10, 10, len(ends)), 0.0)
    return network(ends, reactance, tap=tap, shift_deg=shift)


def whole(net: Network) -> Topology:
    """The topology with every line in service."""
    return net.topology(np.ones(len(net.line_names), dtype=bool))


def balanced(topology: Topology, periods: int = 3, seed: int = 0) -> np.ndarray:
    """Random injections that sum to zero in every island, array (period, bus), MW."""
    injection = np.random.default_rng(seed).uniform(-100, 100, (periods, len(topology.bus_names)))
    for number in range(topology.islands):
        here = topology.island == number
        injection[:, here] -= injection[:, here].mean(axis=1, keepdims=True)
    return injection
