"""Identifiers that follow from what a resource is about, so that writing again never makes a second copy."""

from __future__ import annotations

import hashlib
import uuid

from fhiro2.fhir import systems

SOFTWARE = "fhiro2"
NAMESPACE = uuid.uuid5(uuid.NAMESPACE_URL, systems.BASE)

_HASHED = hashlib.sha1(NAMESPACE.bytes, usedforsecurity=False)
_VARIANT = {digit: "89ab"[int(digit, 16) & 3] for digit in "0123456789abcdef"}


def named(name: str) -> str:
    """The version 5 UUID of ``name`` in our namespace, as text.

    Source: RFC 9562, section 5.5; written out because ``uuid.uuid5`` takes three times as long.
    """
    hashed = _HASHED.copy()
    hashed.update(name.encode())
    digits = hashed.hexdigest()
    return f"{digits[:8]}-{digits[8:12]}-5{digits[13:16]}-{_VARIANT[digits[16]]}{digits[17:20]}-{digits[20:32]}"


def stem(source: str, subject: str, anchor: str) -> str:
    """What the ids of all values and flags of one subject at one anchor begin with, before they are hashed.

    ``subject`` is the reference as the source wrote it: a merge of patients mints no new id.
    """
    return f"{source}\n{subject}\n{anchor}\n"


def about(source: str, subject: str, anchor: str, what: str) -> str:
    """Id of a derived value (``what`` = its code) or a flag (``what`` = its rule) of one subject at one anchor."""
    return named(stem(source, subject, anchor) + what)


def provenance_of(target: str, content_hash: str) -> str:
    """Id of the Provenance of one written content of ``target``."""
    return named(f"{target}\n{content_hash}")


SOFTWARE_ID = named(SOFTWARE)
SOFTWARE_REFERENCE = f"Device/{SOFTWARE_ID}"
