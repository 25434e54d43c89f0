"""PAIR: for each anchor the partner readings, by declared window, direction, blood and rank; runners-up are kept."""

from __future__ import annotations

from typing import get_args

import numpy as np

from fhiro2.catalogue import INPUT_BY_NAME, MEASURED_BY_NAME, QUANTITY
from fhiro2.model import (
    DAY,
    HOUR,
    MINUTE,
    AnchorTable,
    Caution,
    Column,
    Integers,
    Specimen,
    Timelines,
    Truths,
    Why,
    choose,
    pick,
)
from fhiro2.pair.sample import in_sample, leads
from fhiro2.pair.search import NOBODY, Choice, Keys, keys, latest, nearest, within
from fhiro2.settings import ContextFact, Settings, Windows

ARTERIAL, MIXED, CENTRAL = "arterial", "mixed-venous", "central-venous"
PULSE, OUTPUT, BODY = "pulse-oximetry", "cardiac-output", "body"
_ALIVE = ("peep", "paw_mean", "vt", "vt_set", "rr_vent_set", "rr_vent_total")
_STALE = 0.098  # relative doubt that a day adds to a haemoglobin (2 % at once, 10 % after a day: project's judgement)
_CHANGE = 0.005  # inspired oxygen: less than this is no change
_APART = 0.30  # two gases of one minute that differ by more are discordant
_FACTS: tuple[str, ...] = get_args(ContextFact)
_BLOODS = {ARTERIAL: Specimen.ARTERIAL, MIXED: Specimen.MIXED_VENOUS, CENTRAL: Specimen.CENTRAL_VENOUS}
_SAMPLE_INPUTS = {
    ARTERIAL: ("pao2", "paco2", "pha", "hco3a", "sao2", "fo2hba", "fcohb", "fmethb", "hb", "lactate"),
    MIXED: ("pvo2", "pvco2", "svo2", "fo2hbv", "fcohb", "fmethb", "hb"),
    CENTRAL: ("pcvo2", "pcvco2", "scvo2", "fo2hbcv", "fcohb", "fmethb", "hb"),
}


def tables(timelines: Timelines, settings: Settings) -> dict[str, AnchorTable]:
    """The anchor tables of a batch, with every input column filled or its absence explained."""
    windows = settings.windows
    keyed = keys(timelines)
    pairing = _Pairing(timelines, keyed, windows)
    made = {kind: pairing.sample_table(kind) for kind in (MIXED, CENTRAL, ARTERIAL)}
    arterial = made[ARTERIAL]
    for kind in (MIXED, CENTRAL):
        pairing.join(arterial, made[kind])
    made[PULSE] = pairing.reading_table(PULSE, "spo2", "spo2")
    made[OUTPUT] = pairing.reading_table(OUTPUT, "co", "co")
    made[BODY] = pairing.reading_table(BODY, "weight", "weight")
    for table in (arterial, made[PULSE]):
        pairing.in_force(table, "fio2")
    pairing.in_force(arterial, "peep")
    for table in (arterial, made[OUTPUT], made[BODY]):
        pairing.body(table)
    pairing.body_at_output(arterial)
    for table in made.values():
        _state_facts(table, timelines)
    return {kind: _cut(table, timelines) for kind, table in made.items()}


class _Pairing:
    def __init__(self, timelines: Timelines, keyed: Keys, windows: Windows) -> None:
        self.readings = timelines.readings
        self.facts = timelines.facts
        self.keyed = keyed
        self.windows = windows
        value, low, high = self.readings["value"], self.readings["low"], self.readings["high"]
        self.usable: Truths = np.isfinite(value) | (low < high)
        self.same_sample = _micro(windows.same_sample)

    def sample_table(self, kind: str) -> AnchorTable:
        sampled = leads(self.keyed, _BLOODS[kind], self.usable, self.same_sample)
        table = self._table(kind, sampled.lead)
        for name in _SAMPLE_INPUTS[kind]:
            quantity = INPUT_BY_NAME[name].quantity
            measured_only = quantity == "so2"
            choice, torn = in_sample(
                self.keyed, sampled, quantity, self.usable, self.same_sample, measured_only=measured_only
            )
            column = self._column(table, choice, quantity, _BLOODS[kind])
            column.why[torn] = Why.TWO_CANDIDATES
            table.columns[name] = column
            if measured_only:
                calculated, _ = in_sample(self.keyed, sampled, quantity, self.usable, self.same_sample)
                column.why[~choice.found() & calculated.found()] = Why.NOT_COMPUTED_FROM_CALCULATED
        repeated = _repeats(table, _micro(self.windows.repeated_sample))
        lead = table.columns[_SAMPLE_INPUTS[kind][0]]
        lead.runner_up[:-1][repeated[1:]] = table.reading[1:][repeated[1:]]
        _mark_discordant(table, self.same_sample)
        table = table.at(~repeated)
        self._earlier_haemoglobin(table)
        if kind == ARTERIAL:
            self._around(table)
        return table

    def reading_table(self, kind: str, quantity: str, name: str) -> AnchorTable:
        rows = self._stream(quantity)
        table = self._table(kind, rows)
        table.columns[name] = self._column(table, Choice(rows, np.full(len(rows), NOBODY)), quantity)
        return table

    def join(self, arterial: AnchorTable, venous: AnchorTable) -> None:
        """Give each arterial anchor the columns of the venous sample nearest to it."""
        window = _micro(self.windows.arterial_venous)
        found = within(self.keyed, venous.reading, self._at(arterial), window, window)
        choice = nearest(self.keyed, found, len(arterial.reading))
        place = np.searchsorted(venous.reading, np.maximum(choice.row, 0))
        place = np.where(choice.found(), np.minimum(place, max(len(venous.reading) - 1, 0)), 0)
        ever = np.isin(arterial.patient, venous.patient)
        why = np.where(ever, Why.OUTSIDE_WINDOW, Why.NEVER_RECORDED)
        suffix = "v" if venous.kind == MIXED else "cv"
        for name, column in venous.columns.items():
            joined = name if name not in arterial.columns else f"{name}_{suffix}"
            arterial.columns[joined] = _taken(column, place, choice.found(), why)

    def in_force(self, table: AnchorTable, name: str) -> None:
        """A setting in force: the last record, kept longer while the ventilator's feed is alive."""
        at = self._at(table)
        stream = self._stream(name)
        normal = latest(self.keyed, stream, at, _micro(self.windows.inspired_oxygen))
        ventilated = latest(self.keyed, stream, at, _micro(self.windows.inspired_oxygen_ventilated))
        alive = latest(self.keyed, self._stream(*_ALIVE), at, _micro(self.windows.ventilator_alive)).found()
        ventilated.row[~alive] = NOBODY
        choice = normal.or_else(ventilated)
        column = self._column(table, choice, name)
        if name == "fio2":
            column.cautions[self._changed(stream, at, choice)] |= np.uint64(Caution.NOT_STEADY)
        table.columns[name] = column

    def body(self, table: AnchorTable) -> None:
        """Weight and height on record."""
        for name in ("weight", "height"):
            if name not in table.columns:
                table.columns[name] = self._on_record(table, name, self._at(table))

    def body_at_output(self, table: AnchorTable) -> None:
        """Weight and height on record at the cardiac output of each anchor, as ``weight_co`` and ``height_co``."""
        flow = table.columns["co"]
        at = np.where(flow.known(), self.keyed.of[np.maximum(flow.source, 0)], self._at(table))
        for name in ("weight", "height"):
            table.columns[f"{name}_co"] = self._on_record(table, name, at)

    def _on_record(self, table: AnchorTable, name: str, at: Integers) -> Column:
        window = {"weight": self.windows.weight, "height": self.windows.height}[name]
        return self._column(table, latest(self.keyed, self._stream(name), at, _micro(window)), name)

    def _earlier_haemoglobin(self, table: AnchorTable) -> None:
        """Where the sample has no haemoglobin of its own, the latest before it."""
        own, at = table.columns["hb"], self._at(table)
        keep = own.known() | (own.why == Why.TWO_CANDIDATES)
        earlier = within(self.keyed, self._stream("hb"), at, _micro(self.windows.haemoglobin), 0)
        choice = nearest(self.keyed, earlier, len(at), self.keyed.trust)
        column = self._column(table, choice, "hb")
        taken = self.readings["effective"][np.maximum(choice.row, 0)] if len(self.readings) else table.effective
        column.cautions[choice.found()] |= np.uint64(Caution.EARLIER_HAEMOGLOBIN)
        column.uncertainty = np.hypot(column.uncertainty, _STALE * column.value * (table.effective - taken) / DAY)
        column.why[choice.found() & self._bled(table, taken)] = Why.BEFORE_TRANSFUSION
        table.columns["hb"] = choose(keep, own, column)

    def _bled(self, table: AnchorTable, since: Integers) -> Truths:
        """Where a transfusion or bleed is stated between ``since`` and the anchor."""
        found = np.zeros(len(table.reading), dtype=bool)
        for patient, facts in enumerate(self.facts):
            for fact in facts:
                if fact.fact == "transfusion-or-bleed" and fact.answer:
                    found |= (table.patient == patient) & (fact.start <= table.effective) & (fact.end >= since)
        return found

    def _around(self, table: AnchorTable) -> None:
        """What lies around an arterial sample in time: flow, temperature, pressures, SpO2."""
        at, windows = self._at(table), self.windows
        for name, quantity, minutes in (
            ("co", "co", windows.cardiac_output),
            ("ci", "ci", windows.cardiac_output),
            ("temp", "temp_core", windows.temperature),
            ("spo2", "spo2", windows.pulse_oximetry),
        ):
            stream = self._stream(quantity, "temp_blood") if name == "temp" else self._stream(quantity)
            near = within(self.keyed, stream, at, _micro(minutes), _micro(minutes))
            table.columns[name] = self._column(table, nearest(self.keyed, near, len(at)), quantity)
        barometer = latest(self.keyed, self._stream("pb"), at, _micro(windows.barometer))
        table.columns["pb"] = self._column(table, barometer, "pb")

    def _table(self, kind: str, rows: Integers) -> AnchorTable:
        readings = self.readings
        return AnchorTable(kind, rows, readings["patient"][rows], readings["effective"][rows], readings["known"][rows])

    def _stream(self, *quantities: str) -> Integers:
        wanted = np.isin(self.readings["quantity"], [QUANTITY[name] for name in quantities])
        return np.flatnonzero(self.usable & wanted & ~self.readings["corrected"])

    def _at(self, table: AnchorTable) -> Integers:
        return self.keyed.at(table.patient, table.effective)

    def _changed(self, stream: Integers, at: Integers, choice: Choice) -> Truths:
        """Where the value in force was reached by a change less than the steady time before."""
        if not len(stream):
            return np.zeros(len(at), dtype=bool)
        value, patient = self.readings["value"][stream], self.readings["patient"][stream]
        change = np.r_[False, (patient[1:] == patient[:-1]) & (np.abs(np.diff(value)) > _CHANGE)]
        key = np.maximum.accumulate(np.where(change, self.keyed.of[stream], -1))
        place = np.searchsorted(self.keyed.of[stream], at, side="right") - 1
        recent = at - key[np.maximum(place, 0)] < _micro(self.windows.steady)
        result: Truths = choice.found() & (key[np.maximum(place, 0)] >= 0) & recent
        return result

    def _column(self, table: AnchorTable, choice: Choice, quantity: str, blood: Specimen | None = None) -> Column:
        """The chosen readings as a column, or why there is none."""
        readings, found = self.readings, choice.found()
        row = np.maximum(choice.row, 0)
        if len(readings) == 0:
            row = np.zeros(0, dtype=np.int64)
        cautions = np.where(found, readings["cautions"][row], np.uint64(0))
        late = found & (readings["known"][row] - table.known > HOUR)
        cautions[late] |= np.uint64(Caution.LATE_EVIDENCE)

        def taken(name: str) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
            return np.where(found, readings[name][row], np.nan)

        return Column(
            taken("value"),
            taken("low"),
            taken("high"),
            taken("uncertainty"),
            cautions,
            np.where(found, np.int64(Why.KNOWN), self._absence(table, quantity, blood)),
            choice.row,
            choice.runner_up,
        )

    def _absence(self, table: AnchorTable, quantity: str, blood: Specimen | None) -> Integers:
        of_quantity = self.readings["quantity"] == QUANTITY[quantity]
        if blood is not None:
            of_quantity &= np.isin(self.readings["specimen"], (blood, Specimen.UNKNOWN))
        absent = np.flatnonzero(of_quantity & ~self.usable)
        stated = latest(self.keyed, absent, self._at(table), self.same_sample).found()
        ever = np.isin(table.patient, self.readings["patient"][of_quantity & self.usable])
        result: Integers = np.where(
            stated, Why.STATED_ABSENT, np.where(ever, Why.OUTSIDE_WINDOW, Why.NEVER_RECORDED)
        ).astype(np.int64)
        return result


def _micro(minutes: float) -> int:
    return round(minutes * MINUTE)


def _taken(column: Column, place: Integers, found: Truths, why: Integers) -> Column:
    """Rows ``place`` of ``column`` where ``found``, else missing for the reason ``why``."""
    nothing = np.full(len(place), np.nan)
    nobody = np.full(len(place), NOBODY, dtype=np.int64)
    missing = Column(
        nothing, nothing, nothing, nothing, np.zeros(len(place), np.uint64), why.astype(np.int64), nobody, nobody
    )
    return choose(found, pick(column, place), missing) if len(column.value) else missing


def _repeats(table: AnchorTable, window: int) -> Truths:
    """Anchors that file an earlier one again: same patient, near in time, shared analytes equal within rounding."""
    count = len(table.reading)
    repeated = np.zeros(count, dtype=bool)
    if count < 2:
        return repeated
    agreeing = np.zeros(count - 1, dtype=np.int64)
    clash = np.zeros(count - 1, dtype=bool)
    for name, column in table.columns.items():
        half_digit = 0.51 * 10.0 ** -MEASURED_BY_NAME[INPUT_BY_NAME[name].quantity].decimals
        both = column.known()[1:] & column.known()[:-1]
        same = np.abs(column.value[1:] - column.value[:-1]) <= half_digit
        other_reading = column.source[1:] != column.source[:-1]
        agreeing += both & same & other_reading
        clash |= both & ~same
    near = (table.patient[1:] == table.patient[:-1]) & (table.effective[1:] - table.effective[:-1] <= window)
    repeated[1:] = near & ~clash & (agreeing >= 2)
    return repeated


def _mark_discordant(table: AnchorTable, same_sample: int) -> None:
    name = _SAMPLE_INPUTS[table.kind][0]
    column = table.columns[name]
    if len(table.reading) < 2:
        return
    near = (table.patient[1:] == table.patient[:-1]) & (table.effective[1:] - table.effective[:-1] <= same_sample)
    apart = np.abs(np.diff(column.value)) > _APART * np.minimum(column.value[1:], column.value[:-1])
    for side in (slice(1, None), slice(None, -1)):
        column.cautions[side] = np.where(
            near & apart, column.cautions[side] | np.uint64(Caution.DISCORDANT), column.cautions[side]
        )


def _cut(table: AnchorTable, timelines: Timelines) -> AnchorTable:
    inside = (table.effective >= timelines.start) & (table.effective < timelines.stop)
    return table if inside.all() else table.at(inside)


def _state_facts(table: AnchorTable, timelines: Timelines) -> None:
    """For each context fact: 1 stated, 0 stated not to be, -1 unknown, at every anchor."""
    spoken_of = [(patient, facts) for patient, facts in enumerate(timelines.facts) if facts]
    for name in _FACTS:
        state = np.full(len(table.reading), -1, dtype=np.int8)
        for patient, facts in spoken_of:
            mine = table.patient == patient
            for fact in sorted((one for one in facts if one.fact == name), key=lambda one: (one.answer, one.start)):
                begun = mine & (table.effective >= fact.start)
                state[begun] = 0
                if fact.answer:
                    state[begun & (table.effective <= fact.end)] = 1
        table.facts[name] = state
