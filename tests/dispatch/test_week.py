"""A January and a July week of the RTS-GMLC system, shared data that tests may find beside the project."""

from pathlib import Path

import pytest

from simulator.case import read_case
from simulator.horizon import plan_run, run

RTS = Path(__file__).parents[3] / "shared" / "data" / "rts-gmlc"


@pytest.mark.skipif(not RTS.is_dir(), reason="the shared RTS-GMLC data are not here")
def test_two_weeks_are_served_by_one_model():
    case = read_case(RTS)
    for start in ("2020-01-13", "2020-07-13"):
        week = run(case, plan_run(case, start, commitment="relaxed"))
        assert len(week.times) == 168
        assert week.window[-1] == 6
        assert week.kept.unserved.max() < 1e-6
        assert week.kept.surplus.max() < 1e-6
        assert week.counts.builds == 1
        rating = week.kept_inputs.limits.rating
        assert (abs(week.kept.flow) <= rating + 1e-5).all()
