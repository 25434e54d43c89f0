"""Published check values against our formulas, and the proof that every constant and coefficient matters to them."""

from __future__ import annotations

import ast
import csv
import json
from pathlib import Path

import numpy as np
import pytest

from fhiro2 import normal
from fhiro2.derive import acid_base, alveolar, dissociation, oxygen_content, transport, uncertainty
from fhiro2.derive.constants import (
    BINDING_OXYHAEMOGLOBIN,
    BINDING_TOTAL,
    CONSTANTS,
    KILOPASCAL_PER_MMHG,
    RESPIRATORY_QUOTIENT,
    SOLUBILITY,
)

REFERENCE = Path(__file__).parent.parent / "fixtures" / "reference"
KINDS = {"published", "common practice", "cross-model", "definition", "computed", "from memory"}


def rows(name):
    with (REFERENCE / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


ROWS = rows("check_values.csv")


def mmhg(kilopascal):
    return kilopascal / KILOPASCAL_PER_MMHG.value


def oxygen_pressure(given):
    return given["po2_mmHg"] if "po2_mmHg" in given else mmhg(given["po2_kPa"])


def shifts(given):
    """The inputs after the first of ``saturation`` and ``pressure``; standard 5.33 kPa where pCO2 is not at stake."""
    return (
        given.get("pH", 7.40),
        mmhg(given.get("pco2_kPa", 5.33)),
        given.get("temp_C", 37.0),
        given.get("dpg", 5.0),
        given.get("fcohb", 0.0),
        given.get("fmethb", 0.0),
        given.get("fhbf", 0.0),
    )


def p50(**given):
    return dissociation.pressure(0.5, *shifts(given))


def slope_of_log_p50(name, first, second, **given):
    return np.log10(p50(**{name: second}, **given) / p50(**{name: first}, **given)) / (second - first)


def content_by_own_constants(given):
    binding = {1.39: BINDING_OXYHAEMOGLOBIN, 1.34: BINDING_TOTAL}[given["k"]].value
    return oxygen_content.content(binding, given["hb_gdl"], given["so2"], 0, SOLUBILITY.value, oxygen_pressure(given))


def content_uncertainty(given):
    solubility = mmhg_solubility(given["a"])
    return uncertainty.propagate(
        lambda hb, saturation, pressure: oxygen_content.content(given["k"], hb, saturation, 0, solubility, pressure),
        [given["hb"], given["sao2"], given["pao2"]],
        [given["u_hb"], given["u_s"], given["u_p"]],
    )


def mmhg_solubility(per_mmhg):
    """A solubility per mm[Hg] in the unit that ``content`` takes."""
    return per_mmhg / KILOPASCAL_PER_MMHG.value


def extraction_uncertainty(given):
    def extraction(hb, sao2, pao2, svo2, pvo2):
        solubility = mmhg_solubility(0.0031)
        return transport.extraction_ratio(
            oxygen_content.content(1.34, hb, sao2, 0, solubility, pao2),
            oxygen_content.content(1.34, hb, svo2, 0, solubility, pvo2),
        )

    names = {"hb": "u_hb", "sao2": "u_sa", "pao2": "u_pa", "svo2": "u_sv", "pvo2": "u_pv"}
    return uncertainty.propagate(extraction, [given[n] for n in names], [given[u] for u in names.values()])


def gradient_uncertainty(given):
    names = {"fio2": "u_f", "pb": "u_pb", "pco2": "u_c", "R": "u_R", "pao2": "u_p"}
    return uncertainty.propagate(
        lambda fio2, pb, pco2, quotient, pao2: alveolar.gradient(fio2, pb, pco2, quotient, 37.0, pao2),
        [given[n] for n in names],
        [given[u] for u in names.values()],
    )


FORMULAS = {
    "kpa_per_mmHg": lambda given: given["mmHg"],
    "severinghaus_so2": lambda given: dissociation.severinghaus(oxygen_pressure(given)),
    "ellis_inverse_roundtrip": lambda given: dissociation.ellis(given["so2_fraction"]),
    "p50_severinghaus_curve": lambda given: dissociation.ellis(0.5),
    "siggaard_andersen_1990_so2": lambda given: dissociation.saturation(oxygen_pressure(given), *shifts(given)),
    "saturation_gap": lambda given: dissociation.saturation_gap(
        given["so2"], dissociation.saturation(oxygen_pressure(given), *shifts(given))
    ),
    "p50_siggaard_andersen_1990": lambda given: p50(**given),
    "bohr_siggaard_andersen_1990": lambda given: slope_of_log_p50(
        "pH", given["pH1"], given["pH2"], pco2_kPa=given["pco2_kPa"]
    ),
    "p50_temp_slope_siggaard_andersen_1990": lambda given: slope_of_log_p50("temp_C", given["T1"], given["T2"]),
    "hufner_theoretical": lambda given: BINDING_OXYHAEMOGLOBIN.value,
    "o2_content": content_by_own_constants,
    "o2_content_cohb30": lambda given: oxygen_content.content(
        BINDING_OXYHAEMOGLOBIN.value,
        given["hb_gdl"],
        given["so2_functional"],
        given["fcohb"] + given["fmethb"],
        mmhg_solubility(given["a_mmHg"]),
        given["po2_mmHg"],
    ),
    "o2_dissolved": lambda given: oxygen_content.content(0, 0, 0, 0, SOLUBILITY.value, oxygen_pressure(given)),
    "do2": lambda given: transport.delivery(given["co_lmin"], given["cao2_mldl"]),
    "vo2_fick": lambda given: transport.consumption(
        given["co_lmin"], given["do2"] / (10 * given["co_lmin"]) - given["cvo2_mldl"]
    ),
    "o2er": lambda given: transport.extraction_ratio(given["cao2_mldl"], given["cvo2_mldl"]),
    "extraction_excess": lambda given: transport.extraction_excess(given["cao2_mldl"], given["cvo2_mldl"]),
    "index_by_surface": lambda given: transport.index(given["quantity"], given["bsa_m2"]),
    "bsa_dubois": lambda given: transport.body_surface_area(given["height_cm"], given["weight_kg"]),
    "pao2_alveolar_full": lambda given: alveolar.alveolar_pressure(
        given["fio2"], given["pb"], given["pco2"], RESPIRATORY_QUOTIENT.value, given["ph2o"]
    ),
    "aa_gradient": lambda given: alveolar.gradient(
        given["fio2"], given["pb"], given["pco2"], given["R"], given["temp_C"], given["pao2"]
    ),
    "pf_ratio": lambda given: alveolar.ratio(given["pao2_mmHg"], given["fio2"]),
    "sf_ratio": lambda given: alveolar.ratio(given["spo2_percent"], given["fio2"]),
    "ph2o_buck": lambda given: alveolar.water_vapour(given["temp_C"]),
    "pb_west_altitude": lambda given: alveolar.pressure_at_altitude(given["h_km"]),
    "normal_probability": lambda given: normal.probability_below(0.0, 1.0, given["z"]),
    "hco3_clsi_6p095": lambda given: acid_base.bicarbonate(given["pH"], given["pco2"]),
    "gum_u_cao2": content_uncertainty,
    "gum_u_o2er_shared_hb": extraction_uncertainty,
    "gum_u_aa_full": gradient_uncertainty,
}


def error(row):
    """How far ours is from the row's expected number, in the row's unit."""
    ours = FORMULAS[row["formula"]](json.loads(row["inputs"]))
    if row["unit"] == "kPa":
        ours = ours * KILOPASCAL_PER_MMHG.value
    return abs(ours - float(row["expected"]))


def holds(row):
    return bool(error(row) <= float(row["tolerance"]))


@pytest.mark.parametrize("row", ROWS, ids=lambda row: f"{row['formula']} {row['inputs']}")
def test_check_value(row):
    assert holds(row), f"{row['formula']} {row['inputs']}: off by {error(row)} {row['unit']}; source: {row['source']}"


def test_every_formula_has_a_check_value_with_source_and_kind():
    assert {row["formula"] for row in ROWS} == set(FORMULAS)
    assert all(row["source"] and row["kind"] in KINDS and row["unit"] for row in ROWS)


def test_the_binding_constant_is_what_its_definition_gives():
    row = next(row for row in ROWS if row["formula"] == "hufner_theoretical")
    given = json.loads(row["inputs"])
    theory = 4 * given["molar_volume_mL"] / given["M_tetramer"]
    assert abs(theory - BINDING_OXYHAEMOGLOBIN.value) <= float(row["tolerance"])


def test_constants_agree_with_their_second_entry():
    entered = [
        (row["name"], float(row["value"]), row["unit"], float(row["uncertainty"]), row["source"])
        for row in rows("constants.csv")
    ]
    assert entered == [(c.name, c.value, c.unit, c.uncertainty, c.source) for c in CONSTANTS]


@pytest.mark.parametrize("constant", CONSTANTS, ids=lambda constant: constant.name)
@pytest.mark.parametrize("factor", [0.99, 1.01])
def test_constants_matter(constant, factor):
    value = constant.value
    object.__setattr__(constant, "value", value * factor)
    try:
        assert not all(map(holds, ROWS)), f"{constant.name} moved by 1 %: no check value noticed"
    finally:
        object.__setattr__(constant, "value", value)


def parsed(module):
    """The code of a module, and the nodes of every decimal number in it."""
    tree = ast.parse(Path(module.__file__).read_text(encoding="utf-8"))
    return tree, [node for node in ast.walk(tree) if isinstance(node, ast.Constant) and isinstance(node.value, float)]


COEFFICIENTS = [
    pytest.param(module, number, id=f"{module.__name__}:{node.lineno}:{node.value}")
    for module in (acid_base, dissociation, oxygen_content, alveolar, transport, normal)
    for number, node in enumerate(parsed(module)[1])
]


@pytest.mark.parametrize(("module", "number"), COEFFICIENTS)
@pytest.mark.parametrize("factor", [0.99, 1.01])
def test_coefficients_matter(module, number, factor, monkeypatch):
    tree, numbers = parsed(module)
    numbers[number].value *= factor
    moved = {"__name__": module.__name__}
    exec(compile(tree, module.__file__, "exec"), moved)  # noqa: S102 - the project's own source with one number moved
    for name, value in moved.items():
        if callable(value):
            monkeypatch.setattr(module, name, value)
    assert not all(map(holds, ROWS)), f"now {numbers[number].value}: no check value noticed"
