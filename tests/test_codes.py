"""The table of codes: what it must hold for every row, the traps by name, and the loader's refusals.

Names of codes are compared with the publications that the check names; codes, check digits and names are LOINC's.
"""

from __future__ import annotations

import math
from importlib.resources import files

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhiro2.catalogue import DERIVED, MEASURED, MEASURED_BY_NAME
from fhiro2.codes import (
    ANSWERS,
    COLUMNS,
    CONSCIOUSNESS,
    LOINC,
    LOINC_NOTICE,
    MDC,
    Code,
    check_digit,
    code_table,
    read_table,
)
from fhiro2.errors import SkipError, StopError
from fhiro2.model import Kind, Specimen
from fhiro2.units import UCUM, UNITS, read_unit, substance_scale

TEXT = files("fhiro2").joinpath("codes.csv").read_text(encoding="utf-8")
ROWS = sorted({code.loinc: code for code in code_table().values()}.values(), key=lambda code: code.loinc)
READ = [code for code in ROWS if code.use == "value"]


def row(loinc: str) -> Code:
    return code_table()[LOINC, loinc]


def test_the_table_is_the_whole_file() -> None:
    data = [line for line in TEXT.splitlines() if line and not line.startswith("#")]
    assert len(ROWS) == len(data) - 1
    assert {system for system, _ in code_table()} == {LOINC, MDC}


def test_every_check_digit_is_right() -> None:
    assert [code.loinc for code in ROWS if not check_digit(code.loinc)] == []


@pytest.mark.parametrize(
    ("code", "right"),
    [
        ("8310-5", True),  # FHIR R4 vital-signs profiles
        ("85354-9", True),
        ("2339-0", True),
        ("718-7", True),
        ("8310-4", False),  # one digit off
        ("3810-5", False),  # two digits swapped
        ("8310-", False),
        ("83105", False),
        ("-5", False),
        ("8310-55", False),
        ("831O-5", False),
        ("\N{SUPERSCRIPT TWO}-5", False),
        (" 8310-5", False),
        ("8310-5\n", False),
    ],
)
def test_check_digit_by_published_codes(code: str, right: bool) -> None:
    assert check_digit(code) is right


@given(st.integers(1, 9_999_999))
def test_one_of_ten_digits_is_right(number: int) -> None:
    assert sum(check_digit(f"{number}-{digit}") for digit in range(10)) == 1


@given(st.sampled_from(ROWS), st.data())
def test_a_wrong_digit_anywhere_is_caught(code: Code, data: st.DataObject) -> None:
    """The mod-10 scheme (Luhn 1960) catches every single wrong digit."""
    place = data.draw(st.sampled_from([at for at, sign in enumerate(code.loinc) if sign.isdigit()]))
    digit = data.draw(st.sampled_from([one for one in "0123456789" if one != code.loinc[place]]))
    assert not check_digit(code.loinc[:place] + digit + code.loinc[place + 1 :])


def test_the_notice_stands_verbatim_in_the_file_and_in_the_program() -> None:
    notice = (  # wording in HL7 terminology pages that carry LOINC content
        "This material contains content from LOINC (http://loinc.org). LOINC is copyright (c) 1995-2020, Regenstrief "
        "Institute, Inc. and the Logical Observation Identifiers Names and Codes (LOINC) Committee and is available "
        "at no cost under the license at http://loinc.org/license. LOINC(R) is a registered United States trademark "
        "of Regenstrief Institute, Inc."
    )
    assert notice == LOINC_NOTICE
    assert TEXT.splitlines()[0] == f"# {notice}"


def test_the_file_says_what_is_not_loincs_and_what_the_limits_are() -> None:
    head = [line for line in TEXT.splitlines() if line.startswith("#")]
    assert any("all other columns are this project's own" in line for line in head)
    assert any("proposals, not reference ranges" in line for line in head)


def test_every_quantity_is_in_the_catalogue_and_every_one_there_is_read() -> None:
    assert {code.quantity for code in READ} <= set(MEASURED_BY_NAME)
    assert {one.name for one in MEASURED} - {code.quantity for code in READ} == {"fhhb"}  # no code is known for it
    assert {code.quantity for code in ROWS if code.use != "value"} == {""}


@pytest.mark.parametrize("code", READ, ids=lambda code: code.loinc)
def test_a_row_that_is_read(code: Code) -> None:
    quantity = MEASURED_BY_NAME[code.quantity]
    assert math.isfinite(code.low)
    assert math.isfinite(code.high)
    assert code.low < code.high
    assert bool(code.units) is not quantity.coded
    assert len(set(code.units)) == len(code.units)
    for unit in code.units:
        assert substance_scale(code.quantity, unit, quantity.unit).factor > 0.0
    assert code.unit_if_absent in ("", *code.units)
    assert code.long_name
    assert code.confidence in ("high", "medium")
    assert code.corrected is ("adjusted to patient's actual temperature" in code.long_name)


BLOOD = {
    "in Arterial blood": Specimen.ARTERIAL,
    "in Mixed venous blood": Specimen.MIXED_VENOUS,
    "in Central venous blood": Specimen.CENTRAL_VENOUS,
    "in Venous blood": Specimen.VENOUS,
    "in Capillary blood": Specimen.CAPILLARY,
    "in Blood": Specimen.UNKNOWN,
    "in Serum or Plasma": Specimen.PLASMA,
    "in Venous plasma": Specimen.PLASMA,
}
BY_A_DEVICE = {"spo2", "fcohb_pulse", "pf_ratio", "anion_gap"}


@pytest.mark.parametrize("code", READ, ids=lambda code: code.loinc)
def test_the_blood_is_the_one_in_the_name(code: Code) -> None:
    """A pulse oximeter, though named after blood, and a ratio with the airway gas have no specimen."""
    named = {blood for words, blood in BLOOD.items() if words in code.long_name.replace(" of ", " in ")}
    if code.quantity in BY_A_DEVICE and code.specimen is Specimen.NONE:
        assert code.quantity != "anion_gap"
    elif named:
        assert {code.specimen} == named
    else:
        assert code.specimen in (Specimen.NONE, Specimen.UNKNOWN)


def test_what_is_calculated_by_its_name_is_calculated() -> None:
    by_name = [code for code in READ if "Calculated from" in code.long_name or "by calculation" in code.long_name]
    assert len(by_name) > 20
    assert [code.loinc for code in by_name if code.kind is not Kind.CALCULATED] == []
    assert [code.loinc for code in READ if "setting" in code.long_name and code.kind is not Kind.SETTING] == []


def test_base_deficits_and_only_they_change_sign() -> None:
    assert {code.loinc for code in READ if code.negate} == {"1923-2", "1924-0", "30318-0"}
    assert all(code.negate is ("Base deficit" in code.long_name) for code in READ)


def test_pure_fractions_need_no_unit() -> None:
    """LOINC's properties MFr.DF and VFr.DF: a decimal fraction from 0 to 1, named "Pure ... fraction"."""
    pure = {code.loinc for code in READ if "[Pure " in code.long_name}
    assert {"71852-8", "71853-6", "71839-5", "71889-0", "71882-5", "71835-3", "71833-8"} <= pure
    for code in READ:
        assert (code.unit_if_absent == "1") is (code.loinc in pure)
    assert {code.unit_if_absent for code in READ if code.quantity == "ph"} == {"[pH]"}
    assert {code.quantity for code in READ if code.unit_if_absent not in ("", "1")} == {"ph", "gcs"}


@pytest.mark.parametrize("quantity", ["o2_flow", "peep", "fcohb", "fmethb", "cvp"])
def test_zero_is_a_real_result(quantity: str) -> None:
    assert all(code.low <= 0.0 for code in READ if code.quantity == quantity)


@pytest.mark.parametrize("quantity", ["be_actual", "be_standard", "cvp", "anion_gap"])
def test_a_negative_result_is_a_real_one(quantity: str) -> None:
    assert all(code.low < 0.0 for code in READ if code.quantity == quantity)


@pytest.mark.parametrize(
    ("loinc", "values"),
    [  # textbook values of an adult at rest and values of the critically ill (from memory)
        ("2703-7", (95.0, 30.0, 600.0)),
        ("19211-2", (40.0, 18.0)),
        ("2019-8", (40.0, 15.0, 120.0)),
        ("2744-1", (7.40, 6.8, 7.7)),
        ("2708-6", (0.97, 0.5, 1.0)),
        ("718-7", (15.0, 3.0, 22.0)),
        ("2518-9", (1.0, 25.0)),
        ("8741-1", (5.0, 1.0, 20.0)),
        ("8310-5", (37.0, 28.0, 42.0)),
        ("29463-7", (70.0, 0.5, 250.0)),
        ("8302-2", (170.0, 30.0, 210.0)),
        ("76268-2", (760.0, 380.0)),  # sea level, and about 5500 m
        ("1751-7", (40.0, 10.0)),
    ],
)
def test_limits_hold_what_living_patients_have(loinc: str, values: tuple[float, ...]) -> None:
    assert all(row(loinc).low <= value <= row(loinc).high for value in values)


@pytest.mark.parametrize(
    ("loinc", "name"),
    [
        # FHIR R4 4.0.1 definitions
        ("1751-7", "Albumin [Mass/volume] in Serum or Plasma"),
        ("1925-7", "Base excess in Arterial blood by calculation"),
        ("1960-4", "Bicarbonate [Moles/volume] in Arterial blood"),
        ("2019-8", "Carbon dioxide [Partial pressure] in Arterial blood"),
        ("2708-6", "Oxygen saturation in Arterial blood"),
        ("3151-8", "Inhaled oxygen flow rate"),
        ("8867-4", "Heart rate"),
        # US Core
        ("59408-5", "Oxygen saturation in Arterial blood by Pulse oximetry"),
        ("718-7", "Hemoglobin [Mass/volume] in Blood"),
        ("85354-9", "Blood pressure panel with all children optional"),
        # LOINC's own pages
        ("74105-8", "Oxygen saturation Calculated from oxygen partial pressure in Mixed venous blood"),
        ("24336-0", "Gas panel - Arterial blood"),
        # German national sets of laboratory codes and of intensive care
        ("2714-4", "Fractional oxyhemoglobin in Arterial blood"),
        ("20570-8", "Hematocrit [Volume Fraction] of Blood by calculation"),
        ("60952-9", "Mean airway pressure --during inspiration"),
    ],
)
def test_names_stand_as_published(loinc: str, name: str) -> None:
    assert row(loinc).long_name == name


def test_names_that_are_written_out_are_the_table_names() -> None:
    written = [derived for derived in DERIVED if derived.loinc]
    assert len(written) > 5
    assert all(derived.loinc_name == row(derived.loinc).long_name for derived in written)


# The named traps of the field.


def test_pulse_oximetry_is_not_arterial_saturation() -> None:
    assert (row("59408-5").quantity, row("59408-5").specimen) == ("spo2", Specimen.NONE)
    assert (row("2708-6").quantity, row("2708-6").specimen) == ("so2", Specimen.ARTERIAL)
    assert {code.loinc for code in READ if code.quantity == "spo2" and code.method == "legacy"} == {
        "2710-2",
        "71850-2",
    }


def test_a_saturation_from_pressure_is_calculated() -> None:
    from_pressure = {code.loinc for code in READ if code.quantity == "so2" and code.kind is Kind.CALCULATED}
    assert from_pressure == {"2713-6", "51733-4", "51731-8", "51732-6", "74105-8", "71843-7"}


def test_functional_and_fractional_saturation_are_two_quantities() -> None:
    assert {row(loinc).quantity for loinc in ("2714-4", "2715-1", "2716-9", "11559-2", "71839-5")} == {"fo2hb"}
    assert {row(loinc).quantity for loinc in ("2708-6", "2709-4", "2711-0", "20564-1", "71852-8")} == {"so2"}


def test_mixed_is_not_central_venous() -> None:
    assert row("19224-5").specimen is Specimen.MIXED_VENOUS
    assert row("97549-0").specimen is Specimen.CENTRAL_VENOUS


def test_blood_without_a_site_stays_unknown() -> None:
    assert {row(loinc).specimen for loinc in ("11556-8", "11557-6", "11558-4", "20564-1")} == {Specimen.UNKNOWN}


def test_mean_pressure_of_inspiration_is_not_mean_airway_pressure() -> None:
    assert row("60952-9").quantity == "paw_mean_insp"
    assert {code.loinc for code in READ if code.quantity == "paw_mean"} == {"60949-5", "76530-5"}


@pytest.mark.parametrize("loinc", ["110885-1", "109484-6", "109886-2", "109887-0", "109592-6"])
def test_order_terms_are_refused(loinc: str) -> None:
    assert (row(loinc).use, row(loinc).status) == ("refuse", "trial (order only)")


def test_panels_group_and_bear_no_value() -> None:
    assert {code.loinc for code in ROWS if code.use == "panel"} == {"85354-9", "24336-0"}


def test_haemoglobin_by_mass_and_by_amount_are_one_quantity() -> None:
    assert {row(loinc).quantity for loinc in ("718-7", "59260-0", "75928-2", "14775-1")} == {"hb"}
    from_haematocrit = {code.loinc for code in READ if code.quantity == "hb" and code.kind is Kind.CALCULATED}
    assert from_haematocrit == {code.loinc for code in READ if code.method == "from-haematocrit"}
    assert "20509-6" in from_haematocrit


def test_the_method_of_cardiac_output_is_told() -> None:
    assert {code.loinc: code.method for code in READ if code.quantity == "co"} == {
        "8741-1": "unknown",
        "8737-9": "indicator-dilution",
        "76519-8": "continuous",
        "8735-3": "doppler",
        "20207-7": "doppler",
    }


def reads(loinc: str, unit: str) -> bool:
    code = row(loinc)
    try:
        read_unit(UCUM, unit, None, code.units, code.unit_if_absent)
    except SkipError:
        return False
    return True


@pytest.mark.parametrize(
    ("loinc", "good", "bad"),
    [
        ("62274-6", "%", "mm[Hg]"),  # fraction or pressure: only the unit tells, and pressure is not read
        ("60943-8", "%{vol}", "mm[Hg]"),
        ("60842-2", "mL/min", "mL/kg/min"),  # sent for fitness tests too
        ("20562-5", "mL", "L/min"),  # a stroke volume in litres per minute
        ("3150-0", "%", "L/min"),  # oxygen fraction and flow swapped
        ("3151-8", "L/min", "%"),
        ("76534-7", "mm[Hg]", "cm[H2O]"),  # the cuff's example unit in LOINC
        ("8791-6", "mL/m2", "mL"),  # an index, whose example unit in LOINC is a volume
        ("8837-7", "dyn.s.m2/cm5", "dyn.s/cm5"),
        ("19218-7", "mL/dL", "%"),
        ("718-7", "g/dL", "%"),
        ("2708-6", "%", "mm[Hg]"),
    ],
)
def test_the_unit_decides(loinc: str, good: str, bad: str) -> None:
    assert reads(loinc, good)
    assert not reads(loinc, bad)


def test_inspired_oxygen_without_a_unit_is_never_assumed() -> None:
    assert {code.loinc for code in READ if code.quantity == "fio2" and code.unit_if_absent} == {"71835-3"}


def test_device_codes_pair_as_published() -> None:
    """Pairs in the German intensive-care guide, US Core and the HL7 personal-health-device guide."""
    published = {
        "150456": "59408-5", "150324": "2708-6", "149530": "8889-8", "147842": "8867-4", "150017": "8480-6",
        "150018": "8462-4", "150019": "8478-0", "150084": "60985-9", "150045": "8440-0", "150046": "8385-7",
        "150047": "8414-5", "150052": "75994-4", "150276": "8741-1", "150428": "20562-5", "151708": "19891-1",
        "151976": "76248-4", "151980": "76222-9", "152490": "19840-8", "152498": "19839-0", "151586": "33438-3",
        "150656": "50984-4", "150364": "8310-5", "150368": "8329-5", "188436": "60834-9", "188420": "8332-9",
        "160296": "59407-7", "160300": "59418-4",
    }  # fmt: skip
    assert {number: code.loinc for (system, number), code in code_table().items() if system == MDC} == published
    assert (MDC, "151975") not in code_table()  # given for two different means


def test_coded_answers() -> None:
    """The answer list of 67775-7, and "confused", which several implementers use with it."""
    assert {code: CONSCIOUSNESS[number] for (_, code), (_, number) in ANSWERS.items()} == {
        "LA9340-6": "alert",
        "LA6560-2": "confused",
        "LA17108-4": "voice",
        "LA17107-6": "pain",
        "LA9343-0": "unresponsive",
    }
    assert {(system, quantity) for (system, _), (quantity, _) in ANSWERS.items()} == {(LOINC, "consciousness")}
    assert row("67775-7").quantity == "consciousness"


# The loader refuses a table that is wrong in any one way, and names the line.

GOOD = {
    "loinc": "2703-7",
    "long_name": "Oxygen [Partial pressure] in Arterial blood",
    "status": "active",
    "use": "value",
    "quantity": "po2",
    "specimen": "arterial",
    "kind": "measured",
    "corrected": "0",
    "negate": "0",
    "units": "mm[Hg];kPa",
    "unit_if_absent": "",
    "low": "5",
    "high": "800",
    "method": "",
    "note": "",
    "mdc": "",
    "confidence": "high",
    "source": "test",
}
HEADER = "# a comment\n\n" + ",".join(COLUMNS) + "\n"


def line(**cells: str) -> str:
    return ",".join({**GOOD, **cells}.values()) + "\n"


def test_a_good_table_is_read() -> None:
    table = read_table(HEADER + line(mdc="1;2") + "# between\n" + line(loinc="2019-8", note='"a, b"'), "small.csv")
    assert set(table) == {(LOINC, "2703-7"), (LOINC, "2019-8"), (MDC, "1"), (MDC, "2")}
    assert table[LOINC, "2703-7"] is table[MDC, "1"]
    assert table[LOINC, "2019-8"].note == "a, b"
    assert table[LOINC, "2703-7"].units == ("mm[Hg]", "kPa")
    with pytest.raises(TypeError):
        table[LOINC, "1"] = table[LOINC, "2019-8"]  # type: ignore[index]


@pytest.mark.parametrize(
    ("cells", "says"),
    [
        ({"loinc": "2703-8"}, "2703-8 has a wrong check digit; correct the code"),
        ({"loinc": ""}, "wrong check digit"),
        ({"use": "maybe"}, "use 'maybe' is none of value, panel, refuse"),
        ({"quantity": ""}, "needs its quantity"),
        ({"specimen": "artery"}, "'artery' is none of unknown, arterial"),
        ({"kind": ""}, "'' is none of measured, setting"),
        ({"corrected": "yes"}, "'yes' is neither 0 nor 1"),
        ({"negate": ""}, "'' is neither 0 nor 1"),
        ({"units": "mmHg"}, "unit 'mmHg' is not in the table of units"),
        ({"unit_if_absent": "mmHg"}, "unit_if_absent 'mmHg' is none of the row's units"),
        ({"unit_if_absent": "1"}, "unit_if_absent '1' is none of the row's units"),
        ({"low": "800", "high": "5"}, "limits '800' to '5' are no range"),
        ({"low": "5", "high": "5"}, "are no range"),
        ({"low": ""}, "limits '' to '800' are no range"),
        ({"high": "nan"}, "are no range"),
        ({"high": "inf"}, "are no range"),
        ({"low": "-inf"}, "are no range"),
        ({"low": "five"}, "could not convert string to float: 'five'"),
        ({"source": ""}, "a code needs its source"),
        ({"note": "a, b"}, "19 columns where 18 are due; quote texts with commas"),
        ({"note": '"a'}, "unexpected end of data"),
        ({"loinc": "2019-8"}, "2019-8 is given twice; remove one row"),
        ({"mdc": "150017"}, "150017 is given twice; remove one row"),
        ({"mdc": "1;1"}, "1 is given twice; remove one row"),
    ],
)
def test_a_faulty_row_is_refused_with_its_line(cells: dict[str, str], says: str) -> None:
    first = line(loinc="2019-8", mdc="150017")
    with pytest.raises(StopError) as caught:
        read_table(HEADER + first + "# a comment does not shift the count\n" + line(**cells), "small.csv")
    assert str(caught.value).startswith("small.csv:6: ")
    assert says in str(caught.value)


def test_a_short_row_is_refused_with_its_line() -> None:
    with pytest.raises(StopError, match=r"^small\.csv:4: 2 columns where 18 are due"):
        read_table(HEADER + "2703-7,Oxygen\n", "small.csv")


@pytest.mark.parametrize(
    ("text", "number"),
    [
        ("", 1),
        ("# only a comment\n", 1),
        ("# a comment\n" + line(), 2),
        (",".join(COLUMNS[:-1]) + "\n" + line(), 1),
        (",".join(reversed(COLUMNS)) + "\n" + line(), 1),
        (",".join((*COLUMNS, "more")) + "\n" + line(), 1),
    ],
)
def test_a_wrong_first_row_is_refused(text: str, number: int) -> None:
    with pytest.raises(StopError, match=rf"^small\.csv:{number}: the first row must be loinc,long_name"):
        read_table(text, "small.csv")


def test_every_unit_of_the_rows_is_a_unit() -> None:
    assert {unit for code in READ for unit in code.units} <= set(UNITS)
