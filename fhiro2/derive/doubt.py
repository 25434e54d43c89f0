"""Doubts that only several values of one sample show together. They mark, and never relabel or drop, a value."""

from __future__ import annotations

import numpy as np

from fhiro2.derive.acid_base import bicarbonate
from fhiro2.derive.constants import NORMAL_DPG, NORMAL_TEMPERATURE, STANDARD_PH
from fhiro2.derive.dissociation import saturation
from fhiro2.derive.operand import Guard
from fhiro2.model import AnchorTable, Caution, Column, Truths, Why

_STANDARD_PCO2 = 40.0
_AS_CALCULATED = 0.005
_FRACTIONS_SUM = 0.02
_VENOUS_PRESSURE = 45.0
_VENOUS_GAP = 0.10


def mark_arterial(table: AnchorTable) -> None:
    """Mark the doubts of an arterial table in its input columns (in place)."""
    pao2, paco2 = table.columns["pao2"], table.columns["paco2"]
    swapped = _swapped(table)
    for column in (pao2, paco2):
        _mark(column, swapped, Caution.SUSPECT_SWAP)
        column.why[swapped & column.known()] = Why.SUSPECT_SAMPLE
    _mark(pao2, _bubble(table), Caution.SUSPECT_BUBBLE)
    _mark(pao2, _venous(table), Caution.SUSPECT_VENOUS)
    mark_fractions(table, "sao2", "fo2hba")
    calculated = _as_calculated(table)
    _mark(table.columns["sao2"], calculated, Caution.SATURATION_TREATED_AS_CALCULATED)
    table.columns["sao2"].why[calculated] = Why.NOT_COMPUTED_FROM_CALCULATED


def mark_fractions(table: AnchorTable, functional: str, fractional: str) -> None:
    """Mark samples whose saturation and haemoglobin fractions do not add up within 2 points (in place)."""
    so2, fo2hb = table.columns[functional], table.columns[fractional]
    cohb, methb = table.columns["fcohb"], table.columns["fmethb"]
    expected = so2.value * (1 - cohb.value - methb.value)
    known = so2.known() & fo2hb.known() & cohb.known() & methb.known()
    apart = known & (np.abs(fo2hb.value - expected) > _FRACTIONS_SUM)
    together = fo2hb.value + cohb.value + methb.value
    beyond = fo2hb.known() & cohb.known() & methb.known() & (together > 1 + _FRACTIONS_SUM)
    for column in (so2, fo2hb):
        _mark(column, apart | beyond, Caution.FRACTIONS_DISAGREE)


def fractions_disagree(column: Column) -> Truths:
    """Where a known saturation belongs to a sample whose fractions do not add up."""
    result: Truths = column.known() & ((column.cautions & np.uint64(Caution.FRACTIONS_DISAGREE)) != 0)
    return result


def _mark(column: Column, where: Truths, caution: Caution) -> None:
    column.cautions[where] |= np.uint64(caution)


def _swapped(table: AnchorTable) -> Truths:
    """Carbon dioxide and oxygen pressure exchanged: pH and bicarbonate fit the oxygen pressure, not the other.

    Limits of this project: 25 % off, 10 % fit.
    """
    ph, hco3 = table.columns["pha"], table.columns["hco3a"]
    pao2, paco2 = table.columns["pao2"], table.columns["paco2"]
    known = ph.known() & hco3.known() & pao2.known() & paco2.known()
    expected = hco3.value / bicarbonate(ph.value, np.ones(len(ph.value)))
    off = np.abs(paco2.value - expected) > 0.25 * expected
    fits = np.abs(pao2.value - expected) < 0.10 * expected
    result: Truths = known & off & fits
    return result


def _bubble(table: AnchorTable) -> Truths:
    """Room air in the syringe: oxygen drifting to 150 mm[Hg] and low carbon dioxide on nearly room air."""
    fio2, pao2, paco2 = table.columns["fio2"], table.columns["pao2"], table.columns["paco2"]
    result: Truths = (fio2.value <= 0.22) & (pao2.value > 120.0) & (paco2.value < 30.0)
    return result


def _venous(table: AnchorTable) -> Truths:
    """A low pressure in a sample whose saturation lies far below the pulse oximeter's.

    Limits: oxygen pressure below 45 mm[Hg] and a gap of 10 points (design proposals).
    """
    pao2, sao2, spo2 = table.columns["pao2"], table.columns["sao2"], table.columns["spo2"]
    low = pao2.known() & (pao2.value < _VENOUS_PRESSURE)
    result: Truths = low & sao2.known() & spo2.known() & (spo2.value - sao2.value >= _VENOUS_GAP)
    return result


def _as_calculated(table: AnchorTable) -> Truths:
    """A saturation of unstated method, no measured fraction beside it, within half a point of its own curve."""
    columns = table.columns
    sao2, pao2, ph, paco2 = (columns[name] for name in ("sao2", "pao2", "pha", "paco2"))
    unstated = (sao2.cautions & np.uint64(Caution.METHOD_NOT_STATED)) != 0
    alone = ~columns["fo2hba"].known() & ~columns["fcohb"].known() & ~columns["fmethb"].known()
    zero = np.zeros(len(pao2.value))
    curve = saturation(
        pao2.value,
        np.where(ph.known(), ph.value, STANDARD_PH.value),
        np.where(paco2.known(), paco2.value, _STANDARD_PCO2),
        zero + NORMAL_TEMPERATURE.value,
        zero + NORMAL_DPG.value,
        zero,
        zero,
        zero,
    )
    result: Truths = sao2.known() & pao2.known() & unstated & alone & (np.abs(sao2.value - curve) < _AS_CALCULATED)
    return result


def suspect(table: AnchorTable) -> Guard:
    """Guard against an arterial sample that may be venous."""
    doubt = np.uint64(Caution.SUSPECT_VENOUS)
    return Guard((table.columns["pao2"].cautions & doubt) != 0, Why.SUSPECT_SAMPLE)
