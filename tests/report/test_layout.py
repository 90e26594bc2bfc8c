"""Where buses stand on the map."""

import numpy as np
import pytest

from simulator.report.layout import place_buses

NOWHERE = np.full(8, np.nan)
TWO_RINGS = [(0, 1), (1, 2), (2, 3), (3, 0), (4, 5), (5, 6), (6, 4)]


def test_coordinates_are_used_in_one_scale():
    found = place_buses(np.array([60.0, 60.0, 61.0]), np.array([10.0, 11.0, 10.0]), [])
    assert found.geographic
    assert found.x[1] - found.x[0] == pytest.approx(np.cos(np.radians(60 + 1 / 3)))
    assert found.y.tolist() == [60.0, 60.0, 61.0]


def test_a_network_across_the_date_line_stays_together():
    found = place_buses(np.array([-17.0, -17.0]), np.array([179.5, -179.5]), [])
    assert abs(found.x[1] - found.x[0]) < 1.1


def test_buses_of_one_place_are_moved_apart_a_little():
    found = place_buses(np.array([50.0, 50.0, 51.0]), np.array([1.0, 1.0, 3.0]), [])
    apart = np.hypot(found.x[0] - found.x[1], found.y[0] - found.y[1])
    assert 0.01 < apart < 0.05


def test_one_missing_coordinate_makes_the_map_a_drawing():
    latitude = np.array([50.0, np.nan, 51.0])
    assert not place_buses(latitude, np.array([1.0, 2.0, 3.0]), [(0, 1), (1, 2)]).geographic


def test_drawings_repeat_exactly():
    one, other = (place_buses(NOWHERE, NOWHERE, TWO_RINGS) for _ in range(2))
    assert one.x.tobytes() == other.x.tobytes()
    assert one.y.tobytes() == other.y.tobytes()


def test_islands_do_not_overlap():
    found = place_buses(NOWHERE, NOWHERE, TWO_RINGS)
    islands = [range(4), range(4, 7), range(7, 8)]
    centres = [(found.x[list(part)].mean(), found.y[list(part)].mean()) for part in islands]
    reach = [
        max(np.hypot(found.x[bus] - at[0], found.y[bus] - at[1]) for bus in part)
        for part, at in zip(islands, centres, strict=True)
    ]
    for one in range(3):
        for other in range(one):
            distance = np.hypot(*np.subtract(centres[one], centres[other]))
            assert distance > reach[one] + reach[other]


def test_every_bus_has_a_place_of_its_own_in_a_large_network():
    buses = 300
    ring = [(bus, (bus + 1) % buses) for bus in range(buses)]
    found = place_buses(np.full(buses, np.nan), np.full(buses, np.nan), ring)
    places = np.column_stack([found.x, found.y])
    assert np.isfinite(places).all()
    assert len(np.unique(places.round(3), axis=0)) == buses


@pytest.mark.parametrize("buses", [0, 1])
def test_networks_of_no_and_one_bus(buses):
    assert len(place_buses(np.full(buses, np.nan), np.full(buses, np.nan), []).x) == buses
