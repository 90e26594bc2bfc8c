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


@pytest.mark.parametrize("name", FAULTS)
def test_a_fault_is_found(name, town, dataset, tmp_path):
    fault = FAULTS[name]
    case = town_case(tmp_path / "case", fault.changes) if fault.changes else town
    taken_as(dataset, fault.mode)
    fault.plant(dataset)
    found = failed(audit(case, dataset))
    assert set(found) == {fault.check} | fault.also
    assert found[fault.check].startswith(fault.where)


def test_the_run_is_good_before_a_fault_is_planted(town, dataset):
    for mode in ("given", "optimal", "relaxed"):
        taken_as(dataset, mode)
        assert not failed(audit(town, dataset))


def test_no_check_is_without_a_fault(town, dataset):
    named = {fault.check for fault in FAULTS.values()} | {"numbers"}
    checks = audit(town, dataset)
    taken_as(dataset, "optimal")
    assert {check.name for check in checks + audit(town, dataset)} == named


@pytest.mark.parametrize("variable", [name for name in DIMENSIONS if name != "window"])
def test_a_missing_number_is_found(variable, town, dataset):
    values = dataset[variable].to_numpy()
    values[(-1,) * values.ndim] = np.nan
    checks = audit(town, dataset)
    found = failed(checks)
    assert variable.replace("_", " ") in found["numbers"]
    assert len(found) > 1
    json.dumps(audit_record(checks), allow_nan=False)


def test_an_endless_price_is_found(town, dataset):
    dataset["price"].to_numpy()[3, 1] = np.inf
    assert 'bus "Mill" (price) at 2027-03-01T03:00+00:00' in failed(audit(town, dataset))["numbers"]
