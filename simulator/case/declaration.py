"""Everything a case folder declares, before defaults: what the cross-table rules look at.

Public names: `Declaration`.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field

from simulator.case.hourly import HourlyFile
from simulator.case.settings import Settings
from simulator.case.sheet import Sheet
from simulator.case.time_axis import TimeAxis

__all__ = ["Declaration"]


@dataclass(frozen=True, eq=False)
class Declaration:
    """Settings, tables and profiles as declared; what could not be read is None or not whole.

    setting_rows : row in case.toml of each dotted key
    time_zone : IANA name, None where case.toml names none that can be used
    whole : every profile that the files hold is known
    """

    settings: Settings | None
    sheets: Mapping[str, Sheet]
    files: tuple[HourlyFile, ...]
    time: TimeAxis | None
    time_zone: str | None
    whole: bool = True
    setting_rows: Mapping[str, int] = field(default_factory=dict)
