"""Ward Nine as physiology: twelve synthetic beds over 48 hours, each a course of values through time.

Courses are ours, drawn to be plausible and told apart; no value comes from a person. Times are hours after ``START``,
pressures mmHg, haemoglobin g/dL, flows L/min, lactate and bicarbonate mmol/L, temperature Cel; saturations and
haemoglobin fractions in per cent are stated, not computed from a curve.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from itertools import pairwise

START = datetime(2026, 3, 1, 6, tzinfo=UTC)
HOURS = 48

Knots = tuple[tuple[float, float], ...]
Course = dict[str, Knots]

_STEPPED = frozenset({"fio2", "peep", "flow"})  # set by hand: the last value holds until the next
_EVERY_4 = tuple(range(0, HOURS, 4))


@dataclass(frozen=True)
class Bed:
    """One bed with its patient: who, which dialect its devices speak, what is measured when, and the course."""

    number: int
    name: str
    gender: str
    born: str
    weight: float
    height: float
    dialect: str
    story: str
    course: Course
    intensive: bool = False
    gas_hours: tuple[int, ...] = ()
    venous_hours: tuple[int, ...] = ()
    venous: str = "mixed"
    core_temperature: str = "temp"
    ventilated: bool = False
    co_oximeter: bool = True


def value_at(course: Course, name: str, hour: float) -> float:
    """The undisturbed value of ``name`` at ``hour``: straight between knots, level before and after them.

    What is set by hand goes in steps. Raises KeyError where the course does not have it.
    """
    knots = course[name]
    if hour <= knots[0][0]:
        return knots[0][1]
    for (begin, first), (end, second) in pairwise(knots):
        if hour < end:
            return first if name in _STEPPED else first + (second - first) * (hour - begin) / (end - begin)
    return knots[-1][1]


def _level(**values: float) -> Course:
    return {name: ((0.0, value),) for name, value in values.items()}


_HEALTHY = _level(
    po2=91, pco2=39.5, ph=7.405, hco3=24.5, so2=97.2, so2_calculated=97.0, fcohb=1.1, fmethb=0.6, hb=13.6, lactate=1.0,
    spo2=97, hr=76, sbp=124, dbp=72, map=89, rr=15, temp=36.8, flow=0,
)  # fmt: skip

_CARBON_MONOXIDE: Course = {
    **_level(fmethb=0.7, hb=14.1, spo2=99, sbp=118, dbp=70, map=86, temp=36.8),
    "fio2": ((0, 21), (1, 90), (12, 40), (24, 28), (36, 21)),
    "po2": ((0.9, 94), (1, 392), (11.9, 408), (12, 166), (23.9, 162), (24, 114), (35.9, 112), (36, 91)),
    "so2": ((0.9, 98.0), (1, 99.1), (23.9, 99.0), (24, 98.4), (36, 97.4)),
    "fcohb": ((0.4, 31.0), (1.4, 26.5), (3.4, 16.5), (6.4, 8.0), (9.4, 4.0), (12.4, 2.4), (24, 1.4), (48, 1.2)),
    "pco2": ((0, 34), (6.4, 36), (12.4, 38)),
    "ph": ((0, 7.34), (6.4, 7.39), (12.4, 7.41)),
    "hco3": ((0, 18.3), (6.4, 21.8), (12.4, 24.1)),
    "lactate": ((0, 5.2), (3.4, 3.9), (6.4, 2.4), (12.4, 1.3), (48, 0.9)),
    "hr": ((0, 114), (6, 96), (14, 80)),
    "rr": ((0, 25), (6, 19), (14, 15)),
}

_BLEED: Course = {
    **_level(fio2=35, peep=5, po2=124, so2=98.2, fcohb=1.2, fmethb=0.7, spo2=98, rr=16, temp=36.6),
    "hb": ((8, 13.0), (11.4, 10.6), (15.4, 6.5), (17.4, 6.9), (19.4, 8.2), (23.4, 9.6), (48, 9.9)),
    "co": ((8, 5.6), (11.4, 5.4), (15.4, 5.1), (19.4, 5.9), (23.4, 6.3), (48, 6.1)),
    "pco2": ((8, 38), (15.4, 36), (20, 38)),
    "ph": ((8, 7.40), (15.4, 7.31), (20, 7.37), (26, 7.40)),
    "hco3": ((8, 23.5), (15.4, 18.1), (20, 22.0), (26, 23.5)),
    "lactate": ((8, 1.1), (11.4, 2.0), (15.4, 4.7), (19.4, 3.4), (23.4, 1.8), (30, 1.1)),
    "venous so2": ((8, 74.5), (11.4, 68.0), (15.4, 48.5), (19.4, 64.5), (23.4, 71.0), (48, 72.0)),
    "venous po2": ((8, 40.2), (11.4, 37.6), (15.4, 30.3), (19.4, 35.4), (23.4, 38.2), (48, 38.5)),
    "venous pco2": ((8, 43.5), (15.4, 46), (20, 44)),
    "venous ph": ((8, 7.37), (15.4, 7.26), (20, 7.34), (26, 7.37)),
    "hr": ((8, 82), (15.4, 131), (20, 108), (26, 88)),
    "sbp": ((8, 126), (15.4, 82), (19, 104), (26, 118)),
    "dbp": ((8, 70), (15.4, 44), (19, 56), (26, 64)),
    "map": ((8, 88), (15.4, 57), (19, 72), (26, 82)),
}

_LOW_OUTPUT: Course = {
    **_level(fio2=30, peep=6, po2=98, so2=97.4, fcohb=1.3, fmethb=0.8, hb=11.6, spo2=97, rr=20, temp=36.3),
    "co": ((0, 3.5), (12, 3.4), (28, 3.6), (40, 4.3), (48, 4.6)),
    "venous so2": ((0, 51), (12, 49.5), (28, 52), (40, 60), (48, 62.5)),
    "venous po2": ((0, 30.3), (12, 29.4), (28, 30.1), (40, 32.9), (48, 33.7)),
    "venous pco2": ((0, 44), (28, 44), (40, 43)),
    "venous ph": ((0, 7.28), (28, 7.30), (48, 7.35)),
    "pco2": ((0, 35), (28, 35.6), (48, 37)),
    "ph": ((0, 7.33), (28, 7.35), (48, 7.38)),
    "hco3": ((0, 18.4), (28, 19.6), (48, 21.9)),
    "lactate": ((0, 3.6), (12, 4.1), (28, 3.2), (40, 1.9), (48, 1.5)),
    "hr": ((0, 108), (28, 104), (48, 92)),
    "sbp": ((0, 91), (28, 95), (48, 106)),
    "dbp": ((0, 60), (48, 64)),
    "map": ((0, 70), (28, 72), (48, 78)),
}

_SEPTIC: Course = {
    **_level(fio2=35, peep=6, po2=112, so2=98.0, fcohb=1.4, fmethb=0.7, hb=10.0, spo2=98, rr=24),
    **_level(pco2=34, ph=7.30, hco3=16.7),
    **{"venous so2": ((0, 78.5),), "venous po2": ((0, 46.7),), "venous pco2": ((0, 38),), "venous ph": ((0, 7.28),)},
    "co": ((0, 9.8), (24, 9.5), (48, 9.1)),
    "lactate": ((0, 5.8), (16, 5.2), (30, 4.8), (48, 4.3)),
    "hr": ((0, 122), (24, 114), (48, 104)),
    "sbp": ((0, 86), (24, 92), (48, 100)),
    "dbp": ((0, 42), (48, 50)),
    "map": ((0, 57), (24, 61), (48, 67)),
    "temp": ((0, 39.1), (24, 38.7), (48, 38.2)),
}

_PNEUMONIA: Course = {
    **_level(fcohb=1.5, fmethb=0.6, hb=12.4, lactate=1.6, hr=98, sbp=114, dbp=62, map=79),
    "fio2": ((0, 50), (4, 60), (17, 50), (22, 40), (32, 35)),
    "peep": ((0, 10), (4, 12), (22, 10), (32, 8)),
    "po2": ((0, 57), (4.4, 54), (10, 51.5), (16.4, 55), (20.4, 68), (24, 80), (30, 86), (48, 90)),
    "so2": ((0, 88.6), (4.4, 86.6), (10, 84.6), (16.4, 87.4), (20.4, 92.8), (24, 95.2), (30, 96.0), (48, 96.5)),
    "spo2": ((0, 90), (10, 87), (16.4, 89), (20.4, 94), (24, 96), (48, 97)),
    "pco2": ((0, 46), (20, 45), (48, 42)),
    "ph": ((0, 7.36), (20, 7.37), (48, 7.40)),
    "hco3": ((0, 26.0), (20, 26.0), (48, 26.0)),
    "venous so2": ((0, 64), (10, 58), (16, 61), (24, 70), (48, 73)),
    "venous po2": ((0, 35.0), (10, 32.4), (16, 33.6), (24, 38.0), (48, 39.2)),
    "venous pco2": ((0, 51), (48, 47)),
    "venous ph": ((0, 7.33), (48, 7.37)),
    "rr": ((0, 27), (24, 22), (48, 18)),
    "temp": ((0, 38.8), (24, 38.1), (48, 37.5)),
}

_OBSTRUCTIVE: Course = {
    **_level(fio2=28, po2=60, so2=89.6, fcohb=2.8, fmethb=0.6, hb=16.1, lactate=1.2, spo2=90),
    **_level(hr=92, sbp=136, dbp=78, map=97, temp=37.0),
    "pco2": ((0, 61), (48, 57)),
    "ph": ((0, 7.35), (48, 7.37)),
    "hco3": ((0, 33.7), (48, 33.0)),
    "rr": ((0, 24), (48, 20)),
}

BEDS: tuple[Bed, ...] = (
    Bed(1, "Alder", "female", "1979-05-14", 68, 168, "A",
        "carbon monoxide: COHb 31 % on arrival, falling on high oxygen; pO2, functional sO2 and SpO2 normal",
        _CARBON_MONOXIDE, True, (0, 1, 3, 6, 9, 12, 16, 20, 24, 28, 32, 36, 40, 44), core_temperature="temp_bladder"),
    Bed(2, "Birch", "male", "1967-10-02", 82, 178, "A",
        "a bleed: haemoglobin 13 to 6.5 g/dL from hour 8 to 15, extraction above 0.45, then restored",
        _BLEED, True, (0, 4, 8, 11, 13, 15, 17, 19, 23, 27, 31, 35, 39, 43, 47),
        (0, 4, 8, 11, 15, 19, 23, 27, 31, 35, 39, 43, 47), core_temperature="temp_blood", ventilated=True),
    Bed(3, "Cedar", "male", "1954-12-20", 74, 172, "B",
        "low output: cardiac index 1.8 to 2.0, mixed venous saturation 50 %, lactate up; better after hour 28",
        _LOW_OUTPUT, True, _EVERY_4, _EVERY_4, core_temperature="temp_blood", ventilated=True),
    Bed(4, "Dogwood", "male", "1962-07-08", 88, 181, "B",
        "a septic picture: cardiac output 9 to 10 L/min, haemoglobin 10, mixed venous saturation 78 %, lactate 4 to 6",
        _SEPTIC, True, _EVERY_4, _EVERY_4, core_temperature="temp_blood", ventilated=True),
    Bed(5, "Elder", "female", "1971-03-30", 77, 165, "C",
        "pneumonia: pO2 50 to 58 mmHg on 50 to 60 % oxygen until hour 17, then clearing; central venous line only",
        _PNEUMONIA, True, tuple(range(0, HOURS, 3)), tuple(range(0, HOURS, 6)), "central", "temp_bladder", True),
    Bed(6, "Fir", "male", "1956-08-17", 71, 174, "C",
        "chronic obstruction with a charted target of 88 to 92 %: pO2 58 to 62, pCO2 near 60 mmHg, on 28 % oxygen",
        _OBSTRUCTIVE, True, _EVERY_4),
    Bed(7, "Gorse", "female", "1988-01-25", 63, 170, "A", "quiet, a gas every 12 h",
        {**_HEALTHY, **_level(hb=12.9, hr=72), "flow": ((0, 2), (20, 0))}, gas_hours=(2, 14, 26, 38)),
    Bed(8, "Hazel", "male", "1975-06-11", 90, 183, "A",
        "quiet, a gas every 12 h on an analyser that computes its saturation from the pressure",
        {**_HEALTHY, **_level(hr=80, sbp=132), "flow": ((0, 1), (9, 0))},
        gas_hours=(3, 15, 27, 39), co_oximeter=False),
    Bed(9, "Juniper", "female", "1960-09-03", 58, 160, "B", "quiet, a gas every 6 h",
        {**_HEALTHY, **_level(hb=11.8, po2=86, so2=96.5, spo2=96), "flow": ((0, 2), (30, 1))},
        gas_hours=(0, 6, 12, 18, 24, 30, 36, 42)),
    Bed(10, "Larch", "male", "1993-11-19", 79, 186, "B", "quiet, vital signs only",
        {**_HEALTHY, **_level(hr=66, spo2=98)}),
    Bed(11, "Maple", "female", "1969-02-07", 84, 167, "C", "quiet, a gas every 12 h",
        {**_HEALTHY, **_level(hb=12.6, hr=82), "flow": ((0, 3), (12, 2), (33, 1))}, gas_hours=(5, 17, 29, 41)),
    Bed(12, "Nutmeg", "male", "1984-04-28", 73, 176, "C",
        "quiet, vital signs only; the first hours were filed under a second record, merged later",
        {**_HEALTHY, **_level(spo2=97, hr=70), "flow": ((0, 2), (16, 0))}),
)  # fmt: skip
