"""What a site sets: one frozen model of settings and one of its signed mapping, both from strict YAML."""

from __future__ import annotations

from datetime import date, datetime
from pathlib import Path
from typing import Annotated, Literal
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, field_validator

from fhiro2.documents import read_model
from fhiro2.errors import StopError
from fhiro2.fhir import links

ContextFact = Literal[
    "ecmo",
    "intracardiac-shunt",
    "cyanotic-lesion",
    "pregnancy",
    "transfusion-or-bleed",
    "controlled-ventilation",
    "oximetry-disturbing-antidote",
    "smoke-or-nitroprusside-exposure",
]
SpecimenName = Literal["arterial", "mixed_venous", "central_venous", "venous", "capillary", "cord"]


def _path(given: object) -> object:
    if given is None or isinstance(given, Path):
        return given
    if not isinstance(given, str):
        raise ValueError("not the path of a file; write it as text")
    return Path(given)


File = Annotated[Path, BeforeValidator(_path)]


class _Frozen(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class Windows(_Frozen):
    """How far apart, in minutes, two readings may be and still be paired. Design proposals, not published limits."""

    same_sample: float = Field(1.0, gt=0, description="readings without a shared panel, accession or specimen")
    repeated_sample: float = Field(10.0, ge=0, description="one gas filed by analyser, laboratory and chart")
    arterial_venous: float = Field(10.0, gt=0, description="arterial and venous sample of one pair")
    haemoglobin: float = Field(240.0, gt=0, description="age of an earlier haemoglobin")
    inspired_oxygen: float = Field(60.0, gt=0, description="age of the inspired oxygen in force")
    inspired_oxygen_ventilated: float = Field(240.0, gt=0, description="the same while the ventilator's feed is alive")
    ventilator_alive: float = Field(
        60.0, gt=0, description="a ventilator value this recent keeps its settings in force"
    )
    steady: float = Field(20.0, ge=0, description="inspired oxygen changed more recently is called not steady")
    cardiac_output: float = Field(15.0, gt=0, description="cardiac output before or after the gas")
    temperature: float = Field(60.0, gt=0, description="core temperature before or after the gas")
    pulse_oximetry: float = Field(2.0, gt=0, description="SpO2 before or after the gas")
    barometer: float = Field(24 * 60.0, gt=0, description="age of a measured barometric pressure")
    weight: float = Field(7 * 24 * 60.0, gt=0, description="age of a body weight (adults)")
    height: float = Field(365 * 24 * 60.0, gt=0, description="age of a body height (adults)")


class Server(_Frozen):
    """A FHIR R4 server and how to speak with it."""

    name: str = Field("server", pattern=r"^[a-z0-9-]{1,40}$", description="names the source in ids; never change it")
    url: str = Field(description="base address; plain http to this machine only")
    token_file: File | None = Field(None, description="file that holds a static bearer token and nothing else")
    ca_file: File | None = Field(None, description="certificates of a private authority (PEM)")
    page_size: int = Field(200, ge=1, le=1000, description="entries asked for in one page")
    code_parameter: Literal["code", "combo-code"] = Field(
        "code",
        description="combo-code also finds panels by their components, where a server has it, but reads them often",
    )
    overlap_minutes: float = Field(5.0, ge=0, description="how far each cycle reads back before the last one")
    since: str | None = Field(None, description="instant from which the first cycle reads; all without it")
    timeout_seconds: float = Field(30.0, gt=0, description="longest wait for one answer")

    @field_validator("url")
    @classmethod
    def _safe(cls, url: str) -> str:
        try:
            base = links.checked_base(url)
        except StopError as error:
            raise ValueError(str(error)) from None
        home = links.origin(base)
        if home[0] != "https" and not links.on_this_machine(home):
            raise ValueError("the server's base URL is plain http to another machine; use https")
        return base

    @field_validator("since")
    @classmethod
    def _instant(cls, since: str | None) -> str | None:
        if since is None:
            return None
        try:
            offset = datetime.fromisoformat(since).tzinfo
        except ValueError:
            offset = None
        if offset is None:
            raise ValueError("not an instant with its offset from UTC, such as 2026-03-01T06:00:00Z")
        return since


class Settings(_Frozen):
    """The settings of one site. Times are minutes, pressures kPa."""

    station_pressure_kpa: float | None = Field(
        None, gt=40, lt=112, description="usual barometric pressure at the ward, not reduced to sea level"
    )
    altitude_m: float | None = Field(
        None, ge=-430, le=5500, description="altitude of the ward, where its usual pressure is not known"
    )
    server: Server | None = Field(None, description="the FHIR server of `fhiro2 run`")
    store: File = Field(Path("fhiro2.sqlite"), description="file in which `fhiro2 run` keeps what it knows")
    write_together: int = Field(1, ge=1, le=200, description="resources in one request (a batch); 1 for one by one")
    write: bool = Field(False, description="write to the server; without it a cycle says what it would write")
    base_urls: tuple[str, ...] = Field((), description="server addresses whose absolute references are our own")
    zone: str | None = Field(None, description="IANA zone for times without offset; without it they are quarantined")
    assume_respiratory_quotient: bool = Field(True, description="use 0.8 where none is measured, and say so")
    assume_dpg: bool = Field(True, description="use 5 mmol/L for the dissociation curve, and say so")
    windows: Windows = Windows()

    @field_validator("zone")
    @classmethod
    def _zone_exists(cls, zone: str | None) -> str | None:
        return _checked_zone(zone)

    @property
    def usual_pressure_kpa(self) -> float | None:
        """Barometric pressure to assume where none was measured: the stated one, else that of the altitude.

        Source: ISO 2533:1975, standard atmosphere, 101.325 (1 - 2.25577e-5 h)^5.25588 kPa.
        """
        if self.station_pressure_kpa is not None or self.altitude_m is None:
            return self.station_pressure_kpa
        return float(101.325 * (1 - 2.25577e-5 * self.altitude_m) ** 5.25588)


class SiteCode(_Frozen):
    """A site's own code that means a shipped LOINC code."""

    system: str
    code: str
    loinc: str


class SiteFact(_Frozen):
    """A coding on Condition, Procedure, MedicationAdministration or Device that states a context fact."""

    system: str
    code: str
    fact: ContextFact


class SiteSpecimen(_Frozen):
    """A coding of a specimen type or body site that states a kind of blood."""

    system: str
    code: str
    specimen: SpecimenName


class SiteAnswer(_Frozen):
    """A coded answer that means one of ours."""

    system: str
    code: str
    quantity: Literal["consciousness"]
    answer: Literal["alert", "confused", "voice", "pain", "unresponsive"]


class DefaultUnit(_Frozen):
    """A signed statement that one source sends one code without unit, always meaning this unit."""

    source: str
    loinc: str
    unit: str


class Mapping(_Frozen):
    """A site's signed mapping: who owns it, since when, and what its own codes mean."""

    mapping: str
    version: int
    owner: str
    signed: date | str
    zone: str | None = None
    codes: tuple[SiteCode, ...] = ()
    facts: tuple[SiteFact, ...] = ()
    specimens: tuple[SiteSpecimen, ...] = ()
    default_units: tuple[DefaultUnit, ...] = ()
    answers: tuple[SiteAnswer, ...] = ()
    excluded_patients: tuple[str, ...] = ()

    @field_validator("zone")
    @classmethod
    def _zone_exists(cls, zone: str | None) -> str | None:
        return _checked_zone(zone)


HINTS = {"token": "a token is kept in the file that server.token_file names, or in FHIRO2_TOKEN, never in settings"}
NO_MAPPING = Mapping(mapping="none", version=0, owner="nobody", signed="never")


def read_settings(path: Path) -> Settings:
    """The settings in a YAML file; raises StopError with file, line and key."""
    return read_model(path, Settings, HINTS)


def read_mapping(path: Path) -> Mapping:
    """The mapping in a YAML file; raises StopError with file, line and key."""
    return read_model(path, Mapping)


def _checked_zone(zone: str | None) -> str | None:
    if zone is not None:
        try:
            ZoneInfo(zone)
        except (ZoneInfoNotFoundError, ValueError):
            raise ValueError(f"{zone!r} is not an IANA time zone") from None
    return zone
