"""Conditions as a rule file writes them: quantities, limits and units in words, checked and turned into conditions."""

from __future__ import annotations

from collections.abc import Iterator
from difflib import get_close_matches
from functools import cached_property
from typing import Annotated, Self, TypeVar

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationInfo, field_validator, model_validator

from fhiro2.catalogue import DERIVED_BY_CODE, INPUT_BY_NAME, unit_of
from fhiro2.errors import SkipError
from fhiro2.judge.condition import (
    EVEN,
    AllOf,
    AnyOf,
    Condition,
    Not,
    NotKnown,
    Operator,
    SomeOf,
    canonical,
    comparison,
    quantities,
)

Item = TypeVar("Item")


def _filled(items: tuple[Item, ...]) -> tuple[Item, ...]:
    if not items:
        raise ValueError("an empty list; write at least one")
    return items


Some = Annotated[tuple[Item, ...], AfterValidator(_filled)]
Number = Annotated[float, Field(allow_inf_nan=False)]


class _Strict(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class Quorum(_Strict):
    """How many of some clauses must hold: ``least``, from 1 to all of them."""

    of: Some[Clause]
    least: int

    @field_validator("least")
    @classmethod
    def _tells_something(cls, least: int, info: ValidationInfo) -> int:
        most = len(info.data.get("of", ()))  # none where a fault in them is told already
        if most and not 1 <= least <= most:
            raise ValueError(f"{least} of {most} clauses tells nothing; write a number from 1 to {most}")
        return least


class Clause(_Strict):
    """A node of a condition as written.

    It is a group (any, all, some, not), or a comparison of one quantity, true only where it holds with a probability
    of ``certainty`` or more, or ``unknown`` with a quantity: true where that has neither a value nor a bound.
    """

    any_of: Some[Clause] | None = Field(None, alias="any")
    all_of: Some[Clause] | None = Field(None, alias="all")
    some_of: Quorum | None = Field(None, alias="some")
    negated: Clause | None = Field(None, alias="not")
    unknown: str | None = None
    quantity: str | None = None
    below: Number | None = None
    above: Number | None = None
    at_most: Number | None = None
    at_least: Number | None = None
    unit: str | None = None
    certainty: Annotated[Number, Field(gt=EVEN, lt=1)] | None = None

    @model_validator(mode="after")
    def _has_one_shape(self) -> Self:
        given = self.model_fields_set
        if any(getattr(self, name) is None for name in given):
            raise ValueError("a key without a value; fill it in or remove it")
        if given & {"any_of", "all_of", "some_of", "negated", "unknown"}:
            if len(given) > 1:
                raise ValueError("any, all, some, not or unknown stands alone; nest what is beside it")
            if self.unknown is not None:
                _check_quantity(self.unknown)
        elif len(given - {"certainty"}) != 3 or not given > {"quantity", "unit"}:
            operators = ", ".join(Operator)
            raise ValueError(f"a comparison needs quantity, unit and one of {operators}; it may have a certainty")
        else:
            check_unit(str(self.quantity), str(self.unit))
        return self

    @property
    def parts(self) -> tuple[Clause, ...]:
        """The clauses of a group."""
        if self.some_of is not None:
            return self.some_of.of
        if self.negated is not None:
            return (self.negated,)
        return self.any_of or self.all_of or ()

    @property
    def operator(self) -> Operator:
        """How a comparison compares."""
        return next(one for one in Operator if one in self.model_fields_set)

    @cached_property
    def condition(self) -> Condition:
        """The same in canonical units."""
        parts = tuple(part.condition for part in self.parts)
        if self.any_of is not None:
            return AnyOf(parts)
        if self.all_of is not None:
            return AllOf(parts)
        if self.some_of is not None:
            return SomeOf(self.some_of.least, parts)
        if self.negated is not None:
            return Not(*parts)
        if self.unknown is not None:
            return NotKnown(self.unknown)
        limit = getattr(self, self.operator)
        return comparison(str(self.quantity), self.operator, limit, str(self.unit), self.certainty or EVEN)

    def units(self) -> Iterator[tuple[str, str]]:
        """Each quantity with the unit that it is compared in, in the order written.

        After them, in canonical units, those that are only asked whether they are known.
        """
        compared = list(self._compared())
        yield from compared
        for name in quantities(self.condition):
            if name not in dict(compared):
                yield name, unit_of(name)

    def _compared(self) -> Iterator[tuple[str, str]]:
        if self.quantity is not None and self.unit is not None:
            yield self.quantity, self.unit
        for part in self.parts:
            yield from part._compared()


def _check_quantity(name: str) -> None:
    names = [*INPUT_BY_NAME, *DERIVED_BY_CODE]
    if name not in names:
        near = get_close_matches(name, names, 3) or names
        raise ValueError(f"no quantity {name!r}; write one of {', '.join(near)}")


def check_unit(quantity: str, unit: str) -> None:
    """Raises ValueError, which says what to do, for a quantity that no column has or a unit that it cannot have."""
    _check_quantity(quantity)
    try:
        canonical(quantity, unit)
    except SkipError as error:
        raise ValueError(f"unit of {quantity}: {error.detail}; write its UCUM code") from None
