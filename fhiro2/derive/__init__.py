"""DERIVE: anchor tables gain derived columns by published formulas, each value with its doubt or its reason.

What a quantity is stands in ``catalogue.DERIVED``; its equation in ``oxygen_content``, ``dissociation``, ``alveolar``,
``transport``; how the equation meets a table's columns (operands, guards, cautions) in ``contents``, ``exchange``,
``body``.
"""

from __future__ import annotations

from fhiro2.catalogue import DERIVED
from fhiro2.derive.body import add_body, take_index
from fhiro2.derive.contents import add_contents
from fhiro2.derive.doubt import mark_arterial
from fhiro2.derive.exchange import add_exchange
from fhiro2.model import AnchorTable, Timelines
from fhiro2.settings import Settings


def add_derived(tables: dict[str, AnchorTable], timelines: Timelines, settings: Settings) -> None:
    """Add all derived columns of the catalogue to the tables they belong to (in place)."""
    arterial = tables["arterial"]
    mark_arterial(arterial)
    add_contents(arterial, tables["mixed-venous"], tables["central-venous"], timelines)
    add_exchange(arterial, tables["pulse-oximetry"], timelines, settings)
    add_body(tables["cardiac-output"], tables["body"], timelines)
    take_index(arterial, timelines)


def codes_of(table: AnchorTable) -> list[str]:
    """The derived codes that a table carries, in the catalogue's order."""
    return [row.code for row in DERIVED if row.code in table.columns]
