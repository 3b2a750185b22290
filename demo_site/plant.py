"""The invented plant: its units, its loops, and which loop has which story.

Nothing comes in; out go ``LOOPS`` (the table of the plant, in the order of its register) and
``pick`` (the loops of a smaller demonstration). Every name here is made up for the demonstration.
"""

from __future__ import annotations

import csv
import io
from dataclasses import dataclass

SITE_NAME = "Tern Point Works"
ZONE_NAME = "Europe/Oslo"

UNITS = {
    "U1": "Feed preparation",
    "U2": "Reaction",
    "U3": "Separation",
    "U4": "Solvent recovery",
    "U5": "Utilities",
}

_TABLE = """\
tag,unit,kind,service,eu,low,high,criticality,story,note
FIC-1101,U1,flow,Raw feed to mixer M-110,m3/h,0,60,4,retune_tight,
FIC-1102,U1,flow,Recycle to mixer M-110,m3/h,0,25,3,,
FIC-1103,U1,flow,Catalyst slurry dosing,kg/h,0,400,5,,
FIC-1104,U1,flow,Dilution water to M-110,m3/h,0,20,2,,
LIC-1110,U1,level,Mixer M-110,%,0,100,3,retune_reset,
LIC-1120,U1,level,Feed surge drum V-112,%,0,100,2,,averaging
PIC-1130,U1,pressure,Feed header,bar,0,16,3,stiction,
TIC-1140,U1,temperature,Preheater E-114 outlet,degC,20,140,4,gain_loss,
FIC-1141,U1,flow,Hot oil to preheater E-114,t/h,0,30,3,,
AIC-1150,U1,composition,Solids in mixed feed,%,0,40,3,,
PIC-1131,U1,pressure,Slurry pump P-113 discharge,bar,0,25,2,never_met,
TIC-1142,U1,temperature,Mixer M-110 jacket,degC,0,120,2,,
TIC-2101,U2,temperature,Reactor R-210 contents,degC,40,180,5,,outer
FIC-2102,U2,flow,Cooling water to reactor R-210 jacket,m3/h,0,90,4,,inner TIC-2101
FIC-2103,U2,flow,Reactant A to R-210,kg/h,0,5000,5,gain_loss,
FIC-2104,U2,flow,Reactant B to R-210,kg/h,0,2500,5,,
PIC-2110,U2,pressure,Reactor R-210 head,bar,0,10,5,,
PIC-2111,U2,pressure,Inert gas blanket R-210,mbar,0,200,3,,
LIC-2120,U2,level,Reactor R-210,%,0,100,4,,
TIC-2130,U2,temperature,Reactor R-220 contents,degC,40,180,5,,outer
FIC-2131,U2,flow,Steam to reactor R-220,t/h,0,8,4,,inner TIC-2130
TIC-2140,U2,temperature,Quench Q-224 outlet,degC,0,100,4,dead_time,
AIC-2150,U2,composition,Conversion at R-220 outlet,%,50,100,5,dead_time,
FIC-2151,U2,flow,Quench water,m3/h,0,45,3,,
LIC-2121,U2,level,Quench drum V-224,%,0,100,3,,
PIC-2112,U2,pressure,Off-gas to scrubber,mbar,0,400,3,retune_slack,
TIC-3101,U3,temperature,Column C-310 tray 12,degC,60,160,5,,outer
FIC-3102,U3,flow,Steam to reboiler E-312,t/h,0,12,4,,inner TIC-3101
FIC-3103,U3,flow,Reflux to C-310,m3/h,0,50,4,never_met,
FIC-3104,U3,flow,Distillate from C-310,m3/h,0,30,3,,
LIC-3110,U3,level,Reflux drum V-311,%,0,100,3,,
LIC-3111,U3,level,Column C-310 sump,%,0,100,4,,
PIC-3120,U3,pressure,Column C-310 overhead,mbar,0,1200,5,,
TIC-3130,U3,temperature,Condenser E-313 outlet,degC,0,90,3,gain_loss,
AIC-3140,U3,composition,Light end in bottoms,%,0,10,5,retune_tight,
AIC-3141,U3,composition,Heavy end in distillate,%,0,8,4,,
FIC-3150,U3,flow,Bottoms to storage,m3/h,0,40,2,parked,
LIC-3151,U3,level,Product day tank T-315,%,0,100,1,,averaging
TIC-3131,U3,temperature,Bottoms cooler E-315,degC,10,110,2,never_met,
PIC-3121,U3,pressure,Vacuum header,mbar,0,500,3,,
FIC-4101,U4,flow,Wet solvent to stripper C-410,m3/h,0,35,3,dead_tag,
FIC-4102,U4,flow,Strip steam to C-410,t/h,0,6,3,,
TIC-4110,U4,temperature,Stripper C-410 top,degC,40,130,4,saturated,
TIC-4111,U4,temperature,Solvent cooler E-412,degC,0,80,2,stiction,
LIC-4120,U4,level,Stripper C-410 sump,%,0,100,3,,
LIC-4121,U4,level,Solvent decanter V-413,%,0,100,2,,
PIC-4130,U4,pressure,Stripper C-410 overhead,mbar,0,800,3,,
PIC-4131,U4,pressure,Solvent return header,bar,0,12,3,stiction,
AIC-4140,U4,composition,Water in recovered solvent,%,0,5,4,,
FIC-4103,U4,flow,Dry solvent return,m3/h,0,35,3,,
FIC-5101,U5,flow,Boiler feed water,t/h,0,40,4,,
FIC-5102,U5,flow,Fuel gas to boiler B-510,m3/h,0,3000,4,,
PIC-5110,U5,pressure,Steam header,bar,0,20,5,,
PIC-5111,U5,pressure,Instrument air header,bar,0,10,4,,
PIC-5112,U5,pressure,Cooling water header,bar,0,8,3,never_met,
TIC-5120,U5,temperature,Hot oil heater H-512 outlet,degC,100,300,4,cut_short,
TIC-5121,U5,temperature,Chilled water supply,degC,0,30,3,parked,
LIC-5130,U5,level,Deaerator D-513,%,0,100,4,,
FIC-5103,U5,flow,Effluent to treatment,m3/h,0,80,2,,
TIC-5122,U5,temperature,Effluent cooler E-517,degC,10,70,1,,
"""

STORY_ORDER = (
    "FIC-1101",
    "TIC-1140",
    "FIC-3103",
    "AIC-2150",
    "PIC-2112",
    "PIC-1130",
    "TIC-3130",
    "FIC-3150",
    "TIC-4110",
    "LIC-1110",
    "FIC-2103",
    "AIC-3140",
    "TIC-5120",
    "FIC-4101",
    "PIC-4131",
    "TIC-2140",
    "PIC-1131",
    "TIC-4111",
    "TIC-5121",
    "TIC-3131",
    "PIC-5112",
)
"""Loops with a story, in the order in which a smaller demonstration takes them."""

PUT_RIGHT = {
    "TIC-3130": "exchanger cleaned",
    "PIC-2112": "earlier tuning restored",
    "PIC-4131": "valve packing renewed",
}
"""Faults that are mended before the record ends, and how."""

WITHOUT_MODE_TAG = (
    *("FIC-1104", "FIC-4102", "FIC-5103", "PIC-2111", "PIC-3121", "TIC-1142", "TIC-5122"),
    "LIC-4121",
)
NUMERIC_MODE = ("FIC-5101", "PIC-5110")
WITHOUT_OUTPUT_TAG = ("FIC-5103", "AIC-4140")
TRACKING = ("FIC-1102", "FIC-4102", "PIC-2111", "PIC-3121", "TIC-5122", "PIC-4130", "AIC-3141")
"""Loops whose setpoint follows the process variable while they are in manual."""

REVERSED = (
    *("TIC-1142", "TIC-2101", "TIC-2140", "TIC-3130", "TIC-3131", "TIC-4111", "TIC-5121"),
    *("TIC-5122", "AIC-3140", "AIC-4140", "LIC-1110", "LIC-1120", "LIC-2121", "LIC-3110"),
    *("LIC-3111", "LIC-3151", "LIC-4120", "LIC-4121"),
)
"""Loops whose process variable falls as the output rises: coolers, levels held at the outlet."""


@dataclass(frozen=True)
class PlantLoop:
    """One row of the plant's table. ``low``, ``high``: range in ``eu``; ``note``: see table."""

    tag: str
    unit: str
    kind: str
    service: str
    eu: str
    low: float
    high: float
    criticality: int
    story: str
    note: str

    @property
    def averaging(self) -> bool:
        """A level that is meant to float."""
        return self.note == "averaging"

    @property
    def primary(self) -> str | None:
        """Tag of the outer loop of a cascade, if this is the inner one."""
        return self.note.removeprefix("inner ") if self.note.startswith("inner ") else None

    @property
    def has_mode(self) -> bool:
        return self.tag not in WITHOUT_MODE_TAG

    @property
    def has_output(self) -> bool:
        return self.tag not in WITHOUT_OUTPUT_TAG

    @property
    def tracking(self) -> bool:
        return self.tag in TRACKING

    @property
    def reversed(self) -> bool:
        return self.tag in REVERSED

    @property
    def span(self) -> float:
        """Width of the range, engineering units."""
        return self.high - self.low


def _read_table() -> tuple[PlantLoop, ...]:
    rows = csv.DictReader(io.StringIO(_TABLE))
    return tuple(
        PlantLoop(
            tag=row["tag"],
            unit=row["unit"],
            kind=row["kind"],
            service=row["service"],
            eu=row["eu"],
            low=float(row["low"]),
            high=float(row["high"]),
            criticality=int(row["criticality"]),
            story=row["story"] or "healthy",
            note=row["note"],
        )
        for row in rows
    )


LOOPS = _read_table()


def pick(count: int) -> tuple[PlantLoop, ...]:
    """The first ``count`` loops: those with a story and healthy ones in turn, in table order.

    An inner cascade loop comes only after its outer one, so that no cascade lacks its primary.
    """
    if not 1 <= count <= len(LOOPS):
        raise ValueError(f"the plant has 1 to {len(LOOPS)} loops, not {count}")
    told = list(STORY_ORDER)
    plain = [loop.tag for loop in LOOPS if loop.story == "healthy"]
    order: list[str] = []
    while told or plain:
        order += [queue.pop(0) for queue in (told, plain) if queue]
    chosen = set(order[:count])
    return tuple(loop for loop in LOOPS if loop.tag in chosen)
