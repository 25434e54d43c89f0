"""Gas exchange: alveolar pressure and gradient, ratios to inspired oxygen, saturation against its prediction."""

from __future__ import annotations

import numpy as np

from fhiro2.derive.alveolar import alveolar_pressure, gradient, ratio, water_vapour
from fhiro2.derive.body import YEAR, age
from fhiro2.derive.constants import KILOPASCAL_PER_MMHG as KPA
from fhiro2.derive.constants import NORMAL_DPG, NORMAL_TEMPERATURE, RESPIRATORY_QUOTIENT, STANDARD_PH
from fhiro2.derive.dissociation import saturation, saturation_gap
from fhiro2.derive.doubt import fractions_disagree, suspect
from fhiro2.derive.operand import Guard, Mark, Operand, derive, exact, fixed, read, within
from fhiro2.model import AnchorTable, Caution, Column, Floats, Timelines, Why
from fhiro2.settings import Settings

SEA_LEVEL_KPA = 101.325
_QUOTIENT_BASIS, _CURVE_BASIS = 3, 4  # rows of catalogue.BASES
_WEATHER = 8.0  # mm[Hg]; doubt of a barometric pressure that was not measured (common practice)
_LOW_BAROMETER = 670.0


def add_exchange(arterial: AnchorTable, pulse: AnchorTable, timelines: Timelines, settings: Settings) -> None:
    """Gas exchange at arterial samples and pulse oximeter readings (in place)."""
    _gas_exchange(arterial, settings)
    _saturations(arterial, timelines, settings)
    _pulse(pulse)


def _barometer(table: AnchorTable, settings: Settings) -> Operand:
    """The measured barometric pressure, else the site's usual one (or sea level, where the caller allows none)."""
    measured = table.columns["pb"]
    assumed = (settings.usual_pressure_kpa or SEA_LEVEL_KPA) / KPA.value
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
    guards = [within(fio2, 0.205, 1.0), suspect(table)]

    def alveolar(fio2: Floats, barometric: Floats, paco2: Floats, quotient: Floats, temperature: Floats) -> Floats:
        return alveolar_pressure(fio2, barometric, paco2, quotient, water_vapour(temperature))

    operands = [fio2, barometer, paco2, quotient, body]
    derive(table, "alveolar-oxygen-pressure", alveolar, operands, guards, constants=_QUOTIENT_BASIS)
    derive(table, "alveolar-arterial-gradient", gradient, [*operands, pao2], guards, constants=_QUOTIENT_BASIS)
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


def _saturations(table: AnchorTable, timelines: Timelines, settings: Settings) -> None:
    """The saturation predicted by the curve, and how far the measured one and SpO2 lie from it."""
    curve = _curve_operands(table, settings)
    infant = age(table, timelines) < YEAR / 2
    guards = [within(curve[0], 5, 700), Guard(infant, Why.AGE_EXCLUDES)]
    derive(table, "saturation-predicted", _predicted, curve, guards, constants=_CURVE_BASIS)
    measured, pulse = read(table, "sao2"), read(table, "spo2")
    disagreeing = Guard(fractions_disagree(measured.column), Why.SUSPECT_SAMPLE)
    guards = [*guards, suspect(table)]
    derive(table, "saturation-gap-measured", _gap, [measured, *curve], [*guards, disagreeing], constants=_CURVE_BASIS)
    derive(table, "saturation-gap-pulse", _gap, [pulse, *curve], guards, constants=_CURVE_BASIS)


def _curve_operands(table: AnchorTable, settings: Settings) -> list[Operand]:
    """The arguments of ``_on_curve``; a shift that was not measured is standard, doubtful and named."""
    count = len(table.reading)
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
    return [read(table, "pao2"), *shifts, dpg, body]


def _on_curve(
    pressure: Floats, ph: Floats, pco2: Floats, cohb: Floats, methb: Floats, dpg: Floats, body: Floats
) -> Floats:
    carboxy, met = np.clip(cohb, 0.0, 0.9), np.clip(methb, 0.0, 0.9)
    return saturation(pressure, ph, pco2, body, dpg, carboxy, met, np.zeros_like(ph))


def _predicted(*curve: Floats) -> Floats:
    return 100.0 * _on_curve(*curve)


def _gap(observed: Floats, *curve: Floats) -> Floats:
    return saturation_gap(observed, _on_curve(*curve))


def _or_standard(table: AnchorTable, name: str, standard: float, doubt: float) -> Operand:
    column = table.columns[name]
    known = column.known() & ~(column.low < column.high)
    operand = exact(np.where(known, column.value, standard), np.where(known, column.uncertainty, doubt))
    operand.column.cautions[:] = np.where(known, column.cautions, np.uint64(Caution.SHIFT_ASSUMED))
    return Operand(operand.column, {name: known})
