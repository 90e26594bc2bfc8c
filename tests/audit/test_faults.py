"""Every kind of fault, planted in a good run, is found by the check that is there for it."""

import json

import numpy as np
import pytest

from simulator.audit import audit, audit_record
from simulator.audit.evidence import DIMENSIONS
from tests.audit.faults import FAULTS, taken_as
from tests.audit.plants import town_case


def failed(checks):
    return {check.name: check.where for check in checks if not check.passed}


def fixtures_of(fault):
    if fault.guarded:
        return "guarded_town", "guarded"
    return ("ready_town", "ready") if fault.reserves else ("town", "dataset")


@pytest.mark.parametrize("name", FAULTS)
def test_a_fault_is_found(name, request, tmp_path):
    fault = FAULTS[name]
    case, dataset = (request.getfixturevalue(each) for each in fixtures_of(fault))
    if fault.changes:
        case = town_case(
            tmp_path / "case", fault.changes, reserves=fault.reserves, guarded=fault.guarded
        )
    taken_as(dataset, fault.mode)
    fault.plant(dataset)
    found = failed(audit(case, dataset))
    assert set(found) == {fault.check} | fault.also
    assert found[fault.check].startswith(fault.where)


def test_the_runs_are_good_before_a_fault_is_planted(
    town, dataset, ready_town, ready, guarded_town, guarded
):
    for mode in ("given", "optimal", "relaxed"):
        for case, results in ((town, dataset), (ready_town, ready), (guarded_town, guarded)):
            taken_as(results, mode)
            assert not failed(audit(case, results))


def test_no_check_is_without_a_fault(ready_town, ready, guarded_town, guarded):
    named = {fault.check for fault in FAULTS.values()} | {"numbers"}
    checks = audit(ready_town, ready) + audit(guarded_town, guarded)
    taken_as(ready, "optimal")
    assert {check.name for check in checks + audit(ready_town, ready)} == named


def test_without_products_nothing_is_said_of_reserves(town, dataset):
    assert not [check.name for check in audit(town, dataset) if "reserve" in check.name]


@pytest.mark.parametrize("variable", [name for name in DIMENSIONS if name != "window"])
def test_a_missing_number_is_found(variable, ready_town, ready, guarded_town, guarded):
    case, dataset = (ready_town, ready) if ready[variable].size else (guarded_town, guarded)
    if dataset[variable].dtype.kind == "i":
        dataset[variable] = dataset[variable].astype(float)
    values = dataset[variable].to_numpy()
    values[(-1,) * values.ndim] = np.nan
    checks = audit(case, dataset)
    found = failed(checks)
    assert variable.replace("_", " ") in found["numbers"]
    assert len(found) > 1
    json.dumps(audit_record(checks), allow_nan=False)


def test_an_endless_price_is_found(town, dataset):
    dataset["price"].to_numpy()[3, 1] = np.inf
    assert 'bus "Mill" (price) at 2027-03-01T03:00+00:00' in failed(audit(town, dataset))["numbers"]
