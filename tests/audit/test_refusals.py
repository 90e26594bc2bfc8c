"""What cannot be audited is refused, not passed."""

import numpy as np
import pytest

from simulator.audit import audit
from simulator.errors import AuditError
from tests.audit.plants import town_case

REFUSED = {
    "a variable missing": (lambda d: d.drop_vars("price"), "variable price"),
    "a variable over other dimensions": (
        lambda d: d.assign(line_flow=d["line_flow"].isel(time=0)), "variable line_flow",
    ),
    "no names": (lambda d: d.drop_vars("unit"), "dimension unit"),
    "other names": (
        lambda d: d.assign_coords(unit=[f"{name}!" for name in d["unit"].to_numpy()]), "coal!",
    ),
    "another order": (lambda d: d.isel(unit=slice(None, None, -1)), "another order"),
    "a component missing": (lambda d: d.isel(component=slice(1, None)), "dimension component"),
    "other periods": (
        lambda d: d.assign_coords(time=d["time"] + np.timedelta64(30, "m")), "dimension time",
    ),
    "a gap": (lambda d: d.isel(time=[0, 1, 3]), "dimension time"),
    "no periods": (lambda d: d.isel(time=[]), "dimension time"),
    "another length of period": (lambda d: d.assign_attrs(period_hours=0.5), "period_hours"),
    "another mode": (lambda d: d.assign_attrs(commitment="guessed"), "commitment"),
    "limits of another kind": (lambda d: d.assign_attrs(limits="after contingencies"), "limits"),
    "another product": (lambda d: d.drop_dims("product").assign_coords(product=["spin"]), "spin"),
}  # fmt: skip


@pytest.mark.parametrize("name", REFUSED)
def test_what_does_not_fit_the_case_is_refused(name, town, dataset):
    change, subject = REFUSED[name]
    with pytest.raises(AuditError, match=subject):
        audit(town, change(dataset))


def test_a_network_without_one_solution_is_refused(dataset, tmp_path):
    changes = {
        ("lines", "H-M", "to_bus"): "Town", ("lines", "M-T", "tap_ratio"): 1.0,
        ("lines", "old", "reactance_pu"): -0.1,
    }  # fmt: skip
    case = town_case(tmp_path / "case", changes)
    with pytest.raises(AuditError, match="singular"):
        audit(case, dataset)
