"""DERIVE: anchor tables gain derived columns by published formulas, each value with its doubt or its reason.

One declaration a quantity, here; its formula in ``derive/<topic>.py``; what it is in ``catalogue.DERIVED``.
"""

from __future__ import annotations

import numpy as np

from fhiro2.catalogue import DERIVED
from fhiro2.derive.alveolar import alveolar_pressure, gradient, ratio, water_vapour
from fhiro2.derive.basis import Basis, Side, basis
from fhiro2.derive.constants import KILOPASCAL_PER_MMHG as KPA
from fhiro2.derive.constants import NORMAL_DPG, NORMAL_TEMPERATURE, RESPIRATORY_QUOTIENT, SOLUBILITY, STANDARD_PH
from fhiro2.derive.dissociation import saturation
from fhiro2.derive.doubt import mark_arterial, mark_fractions
from fhiro2.derive.operand import Guard, Mark, Operand, derive, exact, fixed, read, within
from fhiro2.derive.oxygen_content import content
from fhiro2.derive.transport import body_surface_area, consumption, delivery, extraction_ratio, index
from fhiro2.model import AnchorTable, Caution, Column, Floats, Timelines, Truths, Why
from fhiro2.settings import Settings

QUOTIENT_BASIS, CURVE_BASIS, SURFACE_BASIS = 3, 4, 5  # rows of catalogue.BASES
SEA_LEVEL_KPA = 101.325
_WEATHER = 8.0  # mm[Hg]; doubt of a barometric pressure that was not measured (common practice)
_SURFACE_DOUBT = 0.05  # relative doubt of body surface by formula (common practice)
_ADULT_YEARS = 18
_YEAR = 365.25 * 24 * 3600 * 1e6
_LOW_BAROMETER = 670.0
_APART = 0.06
_ONE_SIDED_95 = 1.645
_ARTERIAL = Side("sao2", "fo2hba")


def add_derived(tables: dict[str, AnchorTable], timelines: Timelines, settings: Settings) -> None:
    """Add all derived columns of the catalogue to the tables they belong to (in place)."""
    mark_arterial(tables["arterial"])
    for kind, names in (("mixed-venous", ("svo2", "fo2hbv")), ("central-venous", ("scvo2", "fo2hbcv"))):
        mark_fractions(tables[kind], *names)
    _venous(tables["mixed-venous"], "oxygen-content-mixed-venous", "pvo2", Side("svo2", "fo2hbv"))
    _venous(tables["central-venous"], "oxygen-content-central-venous", "pcvo2", Side("scvo2", "fo2hbcv"))
    arterial = tables["arterial"]
    _arterial(arterial, timelines)
    _pair(arterial, timelines)
    _central_pair(arterial)
    _gas_exchange(arterial, settings)
    _predicted(arterial, timelines, settings)
    _pulse(tables["pulse-oximetry"])
    output, body = tables["cardiac-output"], tables["body"]
    flow, surface = read(output, "co"), _surface(output, timelines)
    derive(
        output,
        "cardiac-index",
        _cardiac_index,
        [flow, *surface.operands],
        [within(flow, 0.5, 20), *surface.guards],
        constants=SURFACE_BASIS,
    )
    surface = _surface(body, timelines)
    derive(body, "body-surface-area", _surface_area, surface.operands, surface.guards, constants=SURFACE_BASIS)


def codes_of(table: AnchorTable) -> list[str]:
    """The derived codes that a table carries, in the catalogue's order."""
    return [row.code for row in DERIVED if row.code in table.columns]


class _Surface:
    """Body surface as operands (height, weight, doubt of the formula) with its guards."""

    def __init__(self, operands: list[Operand], guards: list[Guard]) -> None:
        self.operands = operands
        self.guards = guards


def _surface(table: AnchorTable, timelines: Timelines) -> _Surface:
    count = len(table.reading)
    born = np.array([np.nan if one.born is None else one.born for one in timelines.patients], dtype=np.float64)
    age = (table.effective - born[table.patient]) / _YEAR if count else np.zeros(0)
    doubt = exact(np.ones(count), np.full(count, _SURFACE_DOUBT))
    not_adult = ~(age >= _ADULT_YEARS)
    return _Surface([read(table, "height"), read(table, "weight"), doubt], [Guard(not_adult, Why.AGE_EXCLUDES)])


def _surface_area(height: Floats, weight: Floats, doubt: Floats) -> Floats:
    return body_surface_area(height, weight) * doubt


def _cardiac_index(flow: Floats, height: Floats, weight: Floats, doubt: Floats) -> Floats:
    return index(flow, _surface_area(height, weight, doubt))


def _venous(table: AnchorTable, code: str, pressure: str, side: Side) -> None:
    found = basis(table, [side], [("fcohb", "fmethb")])
    operands = _content_operands(table, found, pressure)
    derive(table, code, content, operands, _content_guards(operands), constants=found.number)


def _content_operands(table: AnchorTable, found: Basis, pressure: str) -> list[Operand]:
    solubility = fixed(SOLUBILITY, len(table.reading))
    return [found.binding, read(table, "hb"), found.saturations[0], found.inactive, solubility, read(table, pressure)]


def _content_guards(operands: list[Operand]) -> list[Guard]:
    return [within(operands[1], 2, 25), within(operands[2], 0.1, 1.0)]


def _arterial(table: AnchorTable, timelines: Timelines) -> None:
    found = basis(table, [_ARTERIAL], [("fcohb", "fmethb")])
    operands = _content_operands(table, found, "pao2")
    guards = _content_guards(operands)
    derive(table, "oxygen-content-arterial", content, operands, guards, constants=found.number)
    flow, surface = read(table, "co"), _surface(table, timelines)
    guards = [*guards, _suspect(table), within(flow, 0.5, 20)]

    def delivered(flow: Floats, *rest: Floats) -> Floats:
        return delivery(flow, content(*rest))

    def indexed(height: Floats, weight: Floats, doubt: Floats, *rest: Floats) -> Floats:
        return index(delivered(*rest), _surface_area(height, weight, doubt))

    derive(table, "oxygen-delivery", delivered, [flow, *operands], guards, constants=found.number)
    derive(
        table,
        "oxygen-delivery-index",
        indexed,
        [*surface.operands, flow, *operands],
        [*guards, *surface.guards],
        constants=found.number,
    )


def _content_pair(
    binding: Floats,
    haemoglobin: Floats,
    arterial: Floats,
    venous: Floats,
    inactive: Floats,
    solubility: Floats,
    arterial_pressure: Floats,
    venous_pressure: Floats,
) -> tuple[Floats, Floats]:
    return (
        content(binding, haemoglobin, arterial, inactive, solubility, arterial_pressure),
        content(binding, haemoglobin, venous, inactive, solubility, venous_pressure),
    )


def _difference(*pair: Floats) -> Floats:
    arterial, venous = _content_pair(*pair)
    return arterial - venous


def _extraction(*pair: Floats) -> Floats:
    return extraction_ratio(*_content_pair(*pair))


def _consumption(flow: Floats, *pair: Floats) -> Floats:
    return consumption(flow, _difference(*pair))


def _consumption_index(height: Floats, weight: Floats, doubt: Floats, *rest: Floats) -> Floats:
    return index(_consumption(*rest), _surface_area(height, weight, doubt))


def _pair_operands(table: AnchorTable, side: Side, pressure: str, suffix: str) -> tuple[list[Operand], Basis]:
    found = basis(table, [_ARTERIAL, side], [("fcohb", "fmethb"), (f"fcohb_{suffix}", f"fmethb_{suffix}")])
    return [
        found.binding,
        read(table, "hb"),
        *found.saturations,
        found.inactive,
        fixed(SOLUBILITY, len(table.reading)),
        read(table, "pao2"),
        read(table, pressure),
    ], found


def _pair_guards(table: AnchorTable, operands: list[Operand], suffix: str) -> list[Guard]:
    own, other = table.columns["hb"], table.columns[f"hb_{suffix}"]
    earlier = (own.cautions & np.uint64(Caution.EARLIER_HAEMOGLOBIN)) != 0
    apart = ~earlier & (np.abs(own.value - other.value) > _APART * np.maximum(own.value, other.value))
    excluded = (table.facts["ecmo"] == 1) | (table.facts["intracardiac-shunt"] == 1)
    return [
        *_content_guards(operands),
        within(operands[3], 0.1, 1.0),
        _suspect(table),
        Guard(apart, Why.HAEMOGLOBINS_APART),
        Guard(excluded, Why.CONTEXT_EXCLUDES),
    ]


def _unknown_context(table: AnchorTable) -> Mark:
    unknown = (table.facts["ecmo"] == -1) | (table.facts["intracardiac-shunt"] == -1)
    return Mark(unknown, Caution.CONTEXT_UNKNOWN)


def _pair(table: AnchorTable, timelines: Timelines) -> None:
    operands, found = _pair_operands(table, Side("svo2", "fo2hbv"), "pvo2", "v")
    guards, marks = _pair_guards(table, operands, "v"), [_unknown_context(table)]
    derive(table, "oxygen-content-difference", _difference, operands, guards, marks, found.number)
    derive(table, "oxygen-extraction-ratio", _extraction, operands, guards, marks, found.number)
    flow, surface = read(table, "co"), _surface(table, timelines)
    method = (flow.column.cautions & np.uint64(Caution.CARDIAC_OUTPUT_METHOD_UNKNOWN)) != 0
    guards = [*guards, within(flow, 0.5, 20), Guard(method, Why.CARDIAC_OUTPUT_METHOD)]
    derive(table, "oxygen-consumption", _consumption, [flow, *operands], guards, marks, found.number)
    derive(
        table,
        "oxygen-consumption-index",
        _consumption_index,
        [*surface.operands, flow, *operands],
        [*guards, *surface.guards],
        marks,
        found.number,
    )
    _judge_difference(
        table,
        "oxygen-content-difference",
        "oxygen-extraction-ratio",
        ("oxygen-consumption", "oxygen-consumption-index"),
    )


def _central_pair(table: AnchorTable) -> None:
    operands, found = _pair_operands(table, Side("scvo2", "fo2hbcv"), "pcvo2", "cv")
    guards = _pair_guards(table, operands, "cv")
    everywhere = np.ones(len(table.reading), dtype=bool)
    marks = [_unknown_context(table), Mark(everywhere, Caution.CENTRAL_NOT_MIXED)]
    derive(table, "oxygen-content-difference-central", _difference, operands, guards, marks, found.number)
    derive(table, "oxygen-extraction-ratio-central", _extraction, operands, guards, marks, found.number)
    _judge_difference(table, "oxygen-content-difference-central", "oxygen-extraction-ratio-central", ())


def _judge_difference(table: AnchorTable, difference: str, extraction: str, uptakes: tuple[str, ...]) -> None:
    """No positive difference: nothing follows. Within twice its doubt: extraction is a bound, uptake is withheld."""
    column = table.columns[difference]
    negative = column.known() & ~(column.high > 0)
    doubtful = column.known() & ~negative & (column.value <= 2 * column.uncertainty)
    ratio_column = table.columns[extraction]
    loose = doubtful & ratio_column.known()
    ratio_column.high[loose] = np.round(ratio_column.value[loose] + _ONE_SIDED_95 * ratio_column.uncertainty[loose], 2)
    ratio_column.low[loose], ratio_column.value[loose] = 0.0, np.nan
    for name in (difference, extraction):
        table.columns[name].cautions[doubtful] |= np.uint64(Caution.LOW_DIFFERENCE)
    for name in (extraction, *uptakes):
        _withhold(table.columns[name], negative, Why.NO_POSITIVE_DIFFERENCE)
    for name in uptakes:
        _withhold(table.columns[name], doubtful, Why.UNCERTAIN_DIFFERENCE)


def _withhold(column: Column, where: Truths, why: Why) -> None:
    rows = where & column.known()
    column.why[rows] = why
    column.cautions[rows] = 0
    for values in (column.value, column.low, column.high, column.uncertainty):
        values[rows] = np.nan


def _suspect(table: AnchorTable) -> Guard:
    doubt = np.uint64(Caution.SUSPECT_VENOUS)
    return Guard((table.columns["pao2"].cautions & doubt) != 0, Why.SUSPECT_SAMPLE)


def _barometer(table: AnchorTable, settings: Settings) -> Operand:
    """The measured barometric pressure, else the site's usual one (or sea level, where the caller allows none)."""
    measured = table.columns["pb"]
    assumed = (settings.station_pressure_kpa or SEA_LEVEL_KPA) / KPA.value
    known = measured.known()
    usual = exact(np.where(known, measured.value, assumed), np.where(known, measured.uncertainty, _WEATHER))
    usual.column.cautions[:] = np.where(known, measured.cautions, np.uint64(Caution.PRESSURE_ASSUMED))
    column = usual.column
    return Operand(
        Column(
            column.value,
            np.where(known, measured.low, assumed),
            np.where(known, measured.high, assumed),
            column.uncertainty,
            column.cautions,
            column.why,
            measured.source,
            measured.runner_up,
        ),
        {"pb": known},
    )


def _gas_exchange(table: AnchorTable, settings: Settings) -> None:
    count = len(table.reading)
    fio2, paco2, pao2 = read(table, "fio2"), read(table, "paco2"), read(table, "pao2")
    barometer = _barometer(table, settings)
    quotient = fixed(RESPIRATORY_QUOTIENT, count)
    quotient.column.cautions[:] = np.uint64(Caution.QUOTIENT_ASSUMED)
    if not settings.assume_respiratory_quotient:
        quotient.column.why[:] = Why.NEVER_RECORDED
    body = exact(np.full(count, NORMAL_TEMPERATURE.value), np.zeros(count))  # gases are measured at 37 Cel
    guards = [within(fio2, 0.205, 1.0), _suspect(table)]

    def alveolar(fio2: Floats, barometric: Floats, paco2: Floats, quotient: Floats, temperature: Floats) -> Floats:
        return alveolar_pressure(fio2, barometric, paco2, quotient, water_vapour(temperature))

    operands = [fio2, barometer, paco2, quotient, body]
    derive(table, "alveolar-oxygen-pressure", alveolar, operands, guards, constants=QUOTIENT_BASIS)
    derive(table, "alveolar-arterial-gradient", gradient, [*operands, pao2], guards, constants=QUOTIENT_BASIS)
    difference = table.columns["alveolar-arterial-gradient"]
    negative = difference.known() & (difference.value < -5)
    difference.cautions[negative] |= np.uint64(Caution.NEGATIVE_GRADIENT)
    low = Mark(barometer.column.value < _LOW_BAROMETER, Caution.LOW_BAROMETER)
    derive(table, "pf-ratio", ratio, [pao2, fio2], guards, [low])


def _pulse(table: AnchorTable) -> None:
    spo2, fio2 = read(table, "spo2"), read(table, "fio2")
    too_high = spo2.column.known() & ~(spo2.column.value <= 0.97)
    derive(
        table,
        "sf-ratio",
        lambda saturation, inspired: ratio(100.0 * saturation, inspired),
        [spo2, fio2],
        [Guard(too_high, Why.SATURATION_TOO_HIGH), within(fio2, 0.205, 1.0)],
    )


def _predicted(table: AnchorTable, timelines: Timelines, settings: Settings) -> None:
    """Predicted saturation; a shift that was not measured is standard, doubtful and named."""
    count = len(table.reading)
    pressure = read(table, "pao2")
    shifts = [
        _or_standard(table, name, standard, doubt)
        for name, standard, doubt in (
            ("pha", STANDARD_PH.value, 0.05),
            ("paco2", 40.0, 5.0),
            ("fcohb", 0.0, 0.01),
            ("fmethb", 0.0, 0.005),
        )
    ]
    dpg = fixed(NORMAL_DPG, count)
    dpg.column.cautions[:] = np.uint64(Caution.DPG_ASSUMED)
    if not settings.assume_dpg:
        dpg.column.why[:] = Why.NEVER_RECORDED
    body = exact(np.full(count, NORMAL_TEMPERATURE.value), np.zeros(count))

    def predicted(
        pressure: Floats, ph: Floats, pco2: Floats, cohb: Floats, methb: Floats, dpg: Floats, body: Floats
    ) -> Floats:
        carboxy, met = np.clip(cohb, 0.0, 0.9), np.clip(methb, 0.0, 0.9)
        return 100.0 * saturation(pressure, ph, pco2, body, dpg, carboxy, met, np.zeros_like(ph))

    born = np.array([np.nan if one.born is None else one.born for one in timelines.patients], dtype=np.float64)
    infant = table.effective - born[table.patient] < _YEAR / 2 if count else np.zeros(0, dtype=bool)
    derive(
        table,
        "saturation-predicted",
        predicted,
        [pressure, *shifts, dpg, body],
        [within(pressure, 5, 700), Guard(infant, Why.AGE_EXCLUDES)],
        constants=CURVE_BASIS,
    )


def _or_standard(table: AnchorTable, name: str, standard: float, doubt: float) -> Operand:
    column = table.columns[name]
    known = column.known() & ~(column.low < column.high)
    operand = exact(np.where(known, column.value, standard), np.where(known, column.uncertainty, doubt))
    operand.column.cautions[:] = np.where(known, column.cautions, np.uint64(Caution.SHIFT_ASSUMED))
    return Operand(operand.column, {name: known})
