"""How much a whole replay costs beside reading alone: run with ``python tests/bench_replay.py [RESOURCES]``.

Made-up gases, monitor values and chart values of new patients are replayed on one core: one line in twenty an
arterial anchor, no narrative, lines near the 1,360 to 1,380 bytes that exports of others were seen to have. In the
same run the same lines go through the door alone and through a bare typed decode, in rounds that alternate; what
counts are the ratios of the medians, since one measurement differs from the next by a fifth.
"""

from __future__ import annotations

import cProfile
import json
import pstats
import random
import resource
import statistics
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path

import msgspec

from fhiro2.fhir.wire import Door
from fhiro2.judge import read_pack
from fhiro2.packaged import rules_folder
from fhiro2.read.ndjson import NdjsonSource
from fhiro2.replay import replay
from fhiro2.settings import NO_MAPPING, Settings

SMALLEST_SHARE = 0.25  # of the door's rate
MOST_MEGABYTES = 700
PER_PATIENT = 100
PROFILED = 60_000
ROUNDS = 3
GAS = (
    ("2703-7", "Oxygen [Partial pressure] in Arterial blood", "mm[Hg]", 60, 140),
    ("2019-8", "Carbon dioxide [Partial pressure] in Arterial blood", "mm[Hg]", 30, 50),
    ("2744-1", "pH of Arterial blood", "[pH]", 7.30, 7.45),
    ("2708-6", "Oxygen saturation in Arterial blood", "%", 88, 99),
    ("14775-1", "Hemoglobin [Mass/volume] in Arterial blood by Oximetry", "g/dL", 7, 15),
    ("2030-5", "Carboxyhemoglobin/Hemoglobin.total in Arterial blood", "%", 0, 2),
    ("2615-3", "Methemoglobin/Hemoglobin.total in Arterial blood", "%", 0, 1),
)
MONITOR = (
    ("8867-4", "Heart rate", "/min", 60, 120),
    ("9279-1", "Respiratory rate", "/min", 10, 30),
    ("8478-0", "Mean blood pressure", "mm[Hg]", 55, 100),
    ("8310-5", "Body temperature", "Cel", 36, 39),
    ("3150-0", "Inhaled oxygen concentration", "%", 25, 60),
    ("2951-2", "Sodium [Moles/volume] in Serum or Plasma", "mmol/L", 130, 150),
)


def lines(resources: int, seed: int = 1) -> Iterator[bytes]:
    """Observations of new patients, ``PER_PATIENT`` each."""
    chance = random.Random(seed)
    start = datetime(2026, 1, 1, tzinfo=UTC)
    for number in range(resources):
        patient, place = divmod(number, PER_PATIENT)
        hour, member = divmod(place, 20)
        moment = start + timedelta(minutes=60 * hour + patient % 50)
        gas = member < len(GAS)
        code, name, unit, low, high = GAS[member] if gas else MONITOR[(member - len(GAS)) % len(MONITOR)]
        yield observation(chance, number, patient, moment, (code, name, unit), chance.uniform(low, high), gas)


def observation(
    chance: random.Random,
    number: int,
    patient: int,
    moment: datetime,
    code: tuple[str, str, str],
    value: float,
    gas: bool,
) -> bytes:
    """One Observation as a server sends it."""
    category = "laboratory" if gas else "vital-signs"
    seen = moment + timedelta(minutes=3)
    quantity = {"unit": code[2], "system": "http://unitsofmeasure.org", "code": code[2]}
    found: dict[str, object] = {
        "resourceType": "Observation",
        "id": f"{chance.getrandbits(128):032x}",
        "meta": {
            "versionId": "1",
            "lastUpdated": seen.strftime("%Y-%m-%dT%H:%M:%S.000Z"),
            "profile": [f"http://hl7.org/fhir/us/core/StructureDefinition/us-core-observation-{category}"],
        },
        "identifier": [
            {
                "use": "official",
                "type": coded("http://terminology.hl7.org/CodeSystem/v2-0203", "FILL", "Filler Identifier"),
                "system": "http://hospital.example.org/results",
                "value": f"R{number:09d}",
            }
        ],
        "status": "final",
        "category": [coded("http://terminology.hl7.org/CodeSystem/observation-category", category, category)],
        "code": coded("http://loinc.org", code[0], code[1]) | {"text": code[1]},
        "subject": {"reference": f"Patient/{patient:08d}"},
        "encounter": {"reference": f"Encounter/{patient:08d}"},
        "effectiveDateTime": moment.strftime("%Y-%m-%dT%H:%M:%SZ"),
        "issued": seen.strftime("%Y-%m-%dT%H:%M:%S.000Z"),
        "performer": [{"reference": "Organization/unit-7", "display": "Unit 7"}],
        "valueQuantity": {"value": round(value, 2), **quantity},
        "referenceRange": [{"low": {"value": 1, **quantity}, "high": {"value": 200, **quantity}}],
    }
    if gas:
        found["specimen"] = {"reference": f"Specimen/{patient:08d}-{moment:%H%M}"}
        found["device"] = {"reference": "Device/analyser-2"}
    return json.dumps(found, separators=(",", ":")).encode()


def coded(system: str, code: str, display: str) -> dict[str, object]:
    """A concept with one coding."""
    return {"coding": [{"system": system, "code": code, "display": display}]}


class Wanted(msgspec.Struct):
    """The few fields that a bare decode would read."""

    id: str
    status: str
    effectiveDateTime: str  # noqa: N815
    code: dict[str, object]
    subject: dict[str, str]
    valueQuantity: dict[str, object]  # noqa: N815


def seconds(work: Callable[[], object]) -> float:
    """Processor seconds of this process for ``work``."""
    start = time.process_time()
    work()
    return time.process_time() - start


STAGES = (
    ("read", "ndjson.py", "read"),
    ("door", "wire.py", "observation"),
    ("admit", "admit/__init__.py", "admit"),
    ("account", "book.py", "add"),
    ("order", "timeline.py", "batches"),
    ("pair", "pair/__init__.py", "tables"),
    ("derive", "derive/__init__.py", "add_derived"),
    ("judge", "judge/__init__.py", "judge"),
    ("write", "write/ndjson.py", "write"),
    ("hash", "replay.py", "_file_hash"),
)


def print_stages(profile: cProfile.Profile) -> None:
    """The share of each stage in a profiled replay; profiling makes stages of many small calls look larger."""
    stats = pstats.Stats(profile)
    spent = {(key[0], key[2]): row[3] for key, row in stats.stats.items()}  # type: ignore[attr-defined]
    for stage, file, name in STAGES:
        seconds_spent = sum(took for (where, what), took in spent.items() if where.endswith(file) and what == name)
        print(f"{stage:<8} {seconds_spent / stats.total_tt:6.1%}")  # type: ignore[attr-defined] # noqa: T201


def write_lines(path: Path, resources: int) -> int:
    """Write the resources and return their size in bytes."""
    with path.open("wb") as stream:
        for line in lines(resources):
            stream.write(line + b"\n")
    return path.stat().st_size


def bench(resources: int) -> int:
    """Run all three, print the comparison and the stages, and return 1 where a bound does not hold."""
    with tempfile.TemporaryDirectory() as scratch:
        path, sample = Path(scratch) / "observations.ndjson", Path(scratch) / "sample.ndjson"
        size = write_lines(path, resources)
        write_lines(sample, min(resources, PROFILED))
        pack = read_pack(rules_folder())

        def whole(source: Path, out: str) -> None:
            replay([NdjsonSource("bench", [source])], Path(scratch) / out, Settings(), NO_MAPPING, pack)

        def read(decode: Callable[[bytes], object]) -> None:
            with path.open("rb") as stream:
                for line in stream:
                    decode(line)

        works: dict[str, Callable[[], object]] = {
            "whole replay": lambda: whole(path, "out"),
            "door": lambda: read(Door().observation),
            "bare decode": lambda: read(msgspec.json.Decoder(Wanted).decode),
        }
        rounds = [{name: seconds(work) for name, work in works.items()}]
        resident = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
        rounds += [{name: seconds(work) for name, work in works.items()} for _ in range(ROUNDS - 1)]
        account = json.loads((Path(scratch) / "out" / "account.json").read_text())
        profile = cProfile.Profile()
        profile.runcall(whole, sample, "profiled")
    anchors = account["derived_by_code"]["saturation-predicted"]
    print(f"{resources} resources, mean {size / resources:.0f} bytes, {anchors} arterial anchors ", end="")  # noqa: T201
    print(f"({anchors / resources:.1%}), {account['derived']} values written")  # noqa: T201
    middle = {name: statistics.median(one[name] for one in rounds) for name in works}
    for name, spent in middle.items():
        each = ", ".join(f"{one[name] / resources * 1e6:.1f}" for one in rounds)
        print(f"{name:<13} {resources / spent / 1000:7.1f} k/s, {spent / resources * 1e6:6.1f} us ({each})")  # noqa: T201
    share, of_decode = (middle[name] / middle["whole replay"] for name in ("door", "bare decode"))
    print(f"replay at {share:.3f} of the door (at least {SMALLEST_SHARE}), {of_decode:.3f} of a bare decode")  # noqa: T201
    print(f"resident {resident:.0f} MB (at most {MOST_MEGABYTES})")  # noqa: T201
    print_stages(profile)
    return 0 if share >= SMALLEST_SHARE and resident <= MOST_MEGABYTES else 1


if __name__ == "__main__":
    raise SystemExit(bench(int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000))
