"""The tables of a case folder as data: their columns, types, defaults and rules of value.

Public names: `BLANKS`, `EVERYWHERE`, `Field`, `Kind`, `OUTAGE_KINDS`, `RowRule`, `Rule`, `TABLES`, `Table`.
"""

import unicodedata
from collections.abc import Callable
from dataclasses import dataclass
from enum import Enum, auto
from functools import cached_property
from typing import Any

import pandas as pd
import pandera.pandas as pa

__all__ = [
    "BLANKS",
    "EVERYWHERE",
    "OUTAGE_KINDS",
    "TABLES",
    "Field",
    "Kind",
    "RowRule",
    "Rule",
    "Table",
]


class Kind(Enum):
    """What the cells of a column hold."""

    TEXT = auto()
    NUMBER = auto()
    FLAG = auto()


_TYPES: dict[Kind, Any] = {Kind.TEXT: str, Kind.NUMBER: float, Kind.FLAG: bool}
BLANKS: dict[Kind, Any] = {Kind.TEXT: "", Kind.NUMBER: float("nan"), Kind.FLAG: False}


@dataclass(frozen=True)
class Rule:
    """What every value of a column keeps to; blank cells keep to every rule."""

    text: str
    remedy: str
    holds: Callable[[pd.Series], pd.Series]

    @property
    def check(self) -> pa.Check:
        """The rule as pandera checks it."""
        return pa.Check(self.holds, error=self.text, description=self.remedy)


@dataclass(frozen=True)
class RowRule:
    """What the values of a row keep to together; the problem is shown at `column`.

    `broken` marks the rows that break the rule (a blank cell, NaN, compares as false); `shown` are
    the columns whose values the message shows.
    """

    column: str
    text: str
    remedy: str
    broken: Callable[[pd.DataFrame], "pd.Series[bool]"]
    shown: tuple[str, ...]

    @property
    def check(self) -> pa.Check:
        """The rule as pandera checks it."""
        return pa.Check(
            lambda frame: ~self.broken(frame),
            error=self.text,
            description=self.remedy,
            ignore_na=False,
        )


@dataclass(frozen=True)
class Field:
    """One column.

    required : neither the column nor a cell of it may be missing
    default : what a blank cell means at once; a default that depends on other cells stays blank
        here and is filled in by `simulator.case.defaults`
    """

    name: str
    kind: Kind
    required: bool
    default: Any
    rules: tuple[Rule, ...]

    @property
    def checks(self) -> list[pa.Check]:
        """The rules as pandera checks them."""
        return [rule.check for rule in self.rules]

    @property
    def blank(self) -> Any:
        """What a blank cell turns to."""
        return BLANKS[self.kind] if self.default is None else self.default


@dataclass(frozen=True)
class Table:
    """One file: its path in the folder, what a row of it is called, and its columns.

    key : the column that names the row in messages; `unique` tells whether it may repeat
    """

    name: str
    path: str
    noun: str
    key: str
    fields: tuple[Field, ...]
    row_rules: tuple[RowRule, ...] = ()
    required: bool = False
    unique: bool = True

    @cached_property
    def schema(self) -> pa.DataFrameSchema:
        """The rules of value as a pandera schema."""
        columns = {
            field.name: pa.Column(_TYPES[field.kind], field.checks, nullable=True)
            for field in self.fields
            if field.rules
        }
        return pa.DataFrameSchema(columns, checks=[rule.check for rule in self.row_rules])

    def field(self, name: str) -> Field:
        """Return the column of that name."""
        return next(field for field in self.fields if field.name == name)

    def __reduce__(self) -> tuple[Any, tuple[str]]:
        # Rules are functions without a name; in another process the table is found by its own.
        return _declared, (self.name,)


def _declared(name: str) -> Table:
    return next(table for table in TABLES if table.name == name)


LONGEST_NAME = 64
EVERYWHERE = "all"
"""The zone of a reserve product that every bus is in."""
OUTAGE_KINDS = ("unit", "renewable", "storage", "line", "dc_tie")


def _proper(text: str) -> bool:
    control = any(unicodedata.category(letter) in {"Cc", "Cs", "Zl", "Zp"} for letter in text)
    return len(text) <= LONGEST_NAME and text == text.strip() and not control


LABEL = Rule(
    "must have at most 64 characters, no control character, no blank at either end",
    "shorten or clean it",
    lambda texts: texts.map(_proper),
)
NOT_NEGATIVE = Rule("must be at least 0", "check its sign", lambda values: values >= 0)
POSITIVE = Rule("must be greater than 0", "check its sign", lambda values: values > 0)
EFFICIENCY = Rule(
    "must be greater than 0 and at most 1",
    "write a share, 90 % as 0.9",
    lambda values: values.between(0, 1, inclusive="right"),
)
LOSS = Rule(
    "must be at least 0 and less than 100",
    "write per cent",
    lambda values: values.between(0, 100, inclusive="left"),
)
PERCENT = Rule("must be from 0 to 100", "write per cent", lambda values: values.between(0, 100))
LATITUDE = Rule(
    "must be from -90 to 90",
    "write degrees, north positive",
    lambda values: values.between(-90, 90),
)
LONGITUDE = Rule(
    "must be from -180 to 180",
    "write degrees, east positive",
    lambda values: values.between(-180, 180),
)
REACTANCE = Rule(
    "must not be 0",
    "write the series reactance in per unit",
    lambda values: values != 0,
)
HOURS_IN_STATE = Rule(
    "must not be 0",
    "write hours on as a positive, hours off as a negative number, or leave it blank",
    lambda values: values != 0,
)
KIND = Rule(
    f"must be one of {', '.join(OUTAGE_KINDS)}",
    "name the kind of element that is out",
    lambda texts: texts.isin([*OUTAGE_KINDS, ""]),
)
DIRECTION = Rule(
    "must be up or down",
    "write up for reserve that can raise output, down for reserve that can lower it",
    lambda texts: texts.isin(["up", "down", ""]),
)


def _name(column: str) -> Field:
    return Field(column, Kind.TEXT, required=True, default=None, rules=(LABEL,))


def _label(column: str) -> Field:
    return Field(column, Kind.TEXT, required=False, default="", rules=(LABEL,))


def _text(column: str, *rules: Rule) -> Field:
    return Field(column, Kind.TEXT, required=True, default=None, rules=rules)


def _optional_text(column: str) -> Field:
    return Field(column, Kind.TEXT, required=False, default="", rules=())


def _needed(column: str, *rules: Rule) -> Field:
    return Field(column, Kind.NUMBER, required=True, default=None, rules=rules)


def _number(column: str, *rules: Rule, default: float | None = None) -> Field:
    return Field(column, Kind.NUMBER, required=False, default=default, rules=rules)


def _flag(column: str) -> Field:
    return Field(column, Kind.FLAG, required=False, default=False, rules=())


APART = RowRule(
    "to_bus",
    "must not be its from_bus",
    "name the bus at the other end",
    lambda table: (table["from_bus"] == table["to_bus"]) & (table["from_bus"] != ""),
    ("from_bus", "to_bus"),
)
OFF_MEANS_ZERO = RowRule(
    "initial_output_mw",
    "must be 0, since initial_hours says the unit is off",
    "write 0, or hours on as a positive number",
    lambda table: (table["initial_output_mw"] > 0) & (table["initial_hours"] < 0),
    ("initial_output_mw", "initial_hours"),
)
ON_MEANS_MINIMUM = RowRule(
    "initial_output_mw",
    "must be at least min_output_mw while the unit is on",
    "raise it, or write 0 and hours off as a negative number",
    lambda table: (
        table["initial_output_mw"].between(0, table["min_output_mw"], inclusive="left")
        & ((table["initial_output_mw"] > 0) | (table["initial_hours"] > 0))
    ),
    ("initial_output_mw", "initial_hours", "min_output_mw"),
)
IN_OR_OUT = RowRule(
    "available_percent",
    "must be 0 for a line, which is in or out",
    "write 0, or derate the line by a rating_profile",
    lambda table: (table["kind"] == "line") & (table["available_percent"] > 0),
    ("available_percent",),
)


def _at_most(column: str, limit: str) -> RowRule:
    return RowRule(
        column,
        f"must be at most {limit}",
        f"lower it, or raise {limit}",
        lambda table: table[column] > table[limit],
        (column, limit),
    )


def _at_least(column: str, limit: str, reason: str = "") -> RowRule:
    return RowRule(
        column,
        f"must be at least {limit}{reason}",
        "raise it or leave it blank",
        lambda table: table[column] < table[limit],
        (column, limit),
    )


def _given_with(column: str, other: str) -> RowRule:
    return RowRule(
        column,
        f"must be given, since {other} is",
        "give both or none",
        lambda table: table[column].isna() & table[other].notna(),
        (column, other),
    )


_NEVER_ON = ", or the unit can never be on"

BUSES = Table(
    "buses", "network/buses.csv", "bus", "bus",
    (
        _name("bus"), _label("zone"), _number("voltage_kv", POSITIVE),
        _number("latitude", LATITUDE), _number("longitude", LONGITUDE),
    ),
    (_given_with("latitude", "longitude"), _given_with("longitude", "latitude")),
    required=True,
)  # fmt: skip
LINES = Table(
    "lines", "network/lines.csv", "line", "line",
    (
        _name("line"), _text("from_bus"), _text("to_bus"), _needed("reactance_pu", REACTANCE),
        _number("resistance_pu", default=0.0), _number("charging_pu", default=0.0),
        _number("rating_mw", NOT_NEGATIVE), _number("emergency_rating_mw", NOT_NEGATIVE),
        _number("tap_ratio", POSITIVE, default=1.0), _number("phase_shift_deg", default=0.0),
        _optional_text("rating_profile"),
    ),
    (APART,),
    required=True,
)  # fmt: skip
DC_TIES = Table(
    "dc_ties", "network/dc_ties.csv", "tie", "tie",
    (
        _name("tie"), _text("from_bus"), _text("to_bus"), _needed("forward_mw", NOT_NEGATIVE),
        _number("reverse_mw", NOT_NEGATIVE), _number("loss_percent", LOSS, default=0.0),
    ),
    (APART,),
)  # fmt: skip
UNITS = Table(
    "units", "fleet/units.csv", "unit", "unit",
    (
        _name("unit"), _text("bus"), _label("technology"), _optional_text("fuel"),
        _number("min_output_mw", NOT_NEGATIVE, default=0.0), _needed("max_output_mw", NOT_NEGATIVE),
        _number("ramp_up_mw_per_h", NOT_NEGATIVE), _number("ramp_down_mw_per_h", NOT_NEGATIVE),
        _number("start_ramp_mw", NOT_NEGATIVE), _number("stop_ramp_mw", NOT_NEGATIVE),
        _number("no_load_cost_per_h", default=0.0), _number("variable_om_per_mwh", default=0.0),
        _number("start_cost", NOT_NEGATIVE, default=0.0), _number("cold_start_cost", NOT_NEGATIVE),
        _number("cold_after_h", NOT_NEGATIVE, default=0.0),
        _number("min_up_h", NOT_NEGATIVE, default=0.0),
        _number("min_down_h", NOT_NEGATIVE, default=0.0), _flag("must_run"),
        _number("initial_output_mw", NOT_NEGATIVE), _number("initial_hours", HOURS_IN_STATE),
        _optional_text("on_profile"),
    ),
    (
        _at_most("min_output_mw", "max_output_mw"),
        _at_least("start_ramp_mw", "min_output_mw", _NEVER_ON),
        _at_least("stop_ramp_mw", "min_output_mw", _NEVER_ON),
        _at_least("cold_start_cost", "start_cost"),
        _at_most("initial_output_mw", "max_output_mw"),
        OFF_MEANS_ZERO,
        ON_MEANS_MINIMUM,
    ),
    required=True,
)  # fmt: skip
OFFERS = Table(
    "offers", "fleet/offers.csv", "unit", "unit",
    (_text("unit"), _needed("up_to_mw", POSITIVE), _needed("cost_per_mwh")),
    unique=False,
)  # fmt: skip
HEAT_RATES = Table(
    "heat_rates", "fleet/heat_rates.csv", "unit", "unit",
    (_text("unit"), _needed("up_to_mw", POSITIVE), _needed("heat_rate_gj_per_mwh", NOT_NEGATIVE)),
    unique=False,
)  # fmt: skip
FUELS = Table(
    "fuels", "fleet/fuels.csv", "fuel", "fuel",
    (
        _name("fuel"), _needed("price_per_gj", NOT_NEGATIVE),
        _number("co2_t_per_gj", NOT_NEGATIVE, default=0.0), _optional_text("price_profile"),
    ),
)  # fmt: skip
RENEWABLES = Table(
    "renewables", "fleet/renewables.csv", "plant", "plant",
    (
        _name("plant"), _text("bus"), _label("technology"), _needed("capacity_mw", NOT_NEGATIVE),
        _text("profile"), _number("offer_per_mwh", default=0.0),
    ),
)  # fmt: skip
STORAGE = Table(
    "storage", "fleet/storage.csv", "store", "store",
    (
        _name("store"), _text("bus"), _needed("charge_mw", NOT_NEGATIVE),
        _number("discharge_mw", NOT_NEGATIVE), _needed("energy_mwh", NOT_NEGATIVE),
        _number("charge_efficiency", EFFICIENCY, default=1.0),
        _number("discharge_efficiency", EFFICIENCY, default=1.0),
        _number("loss_percent_per_h", LOSS, default=0.0),
        _number("initial_mwh", NOT_NEGATIVE), _number("final_mwh", NOT_NEGATIVE),
        _number("throughput_cost_per_mwh", NOT_NEGATIVE, default=0.0),
        _number("end_value_per_mwh", default=0.0),
    ),
    (_at_most("initial_mwh", "energy_mwh"), _at_most("final_mwh", "energy_mwh")),
)  # fmt: skip
RESERVES = Table(
    "reserves", "fleet/reserves.csv", "product", "product",
    (
        _name("product"), _text("direction", DIRECTION),
        Field("zone", Kind.TEXT, required=False, default=EVERYWHERE, rules=()),
        _number("requirement_mw", NOT_NEGATIVE, default=0.0), _optional_text("requirement_profile"),
        _number("percent_of_load", PERCENT, default=0.0), _number("response_minutes", POSITIVE),
        _number("shortage_per_mwh", NOT_NEGATIVE),
    ),
)  # fmt: skip
LOADS = Table(
    "loads", "demand/loads.csv", "load", "load",
    (
        _name("load"), _text("bus"), _text("profile"), _number("scale_mw", default=1.0),
        _number("unserved_per_mwh", NOT_NEGATIVE),
    ),
    required=True,
)  # fmt: skip
OUTAGES = Table(
    "outages", "calendar/outages.csv", "outage of", "name",
    (
        _text("kind", KIND), _text("name"), _text("from"), _text("until"),
        _number("available_percent", PERCENT, default=0.0),
    ),
    (IN_OR_OUT,),
    unique=False,
)  # fmt: skip
TABLES = (
    BUSES, LINES, DC_TIES, UNITS, OFFERS, HEAT_RATES, FUELS, RENEWABLES, STORAGE, RESERVES, LOADS,
    OUTAGES,
)  # fmt: skip
"""The tables that are read, in the order in which their problems are told."""
