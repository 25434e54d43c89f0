"""Put the resources of a folder of NDJSON files into a FHIR server: ``fhir_load.py BASE_URL FOLDER``.

What others refer to goes first and Observations last, each in the order of ``lastUpdated``, so that a later version
replaces an earlier one. A line that is no resource with an id, and what the server does not take, is refused and
counted. Needs nothing but the standard library. The token, where one is needed, is taken from FHIR_TOKEN.
"""

from __future__ import annotations

import json
import os
import sys
import urllib.error
import urllib.request
from pathlib import Path
from typing import Any

AT_ONCE = 100
SLOWEST = 120  # seconds for one Bundle


def load(base_url: str, folder: Path) -> tuple[int, int]:
    """How many resources the server took, and how many lines were refused."""
    lines = [line for file in sorted(folder.glob("*.ndjson")) for line in file.read_bytes().splitlines() if line]
    resources = sorted(filter(None, map(_resource, lines)), key=_place)
    taken = sum(_taken(base_url, resources[start : start + AT_ONCE]) for start in range(0, len(resources), AT_ONCE))
    return taken, len(lines) - taken


def _resource(line: bytes) -> dict[str, Any] | None:
    try:
        found = json.loads(line)
    except ValueError:
        return None
    return found if isinstance(found, dict) and found.get("resourceType") and found.get("id") else None


def _place(resource: dict[str, Any]) -> tuple[bool, str]:
    return resource["resourceType"] == "Observation", resource.get("meta", {}).get("lastUpdated", "")


def _taken(base_url: str, resources: list[dict[str, Any]]) -> int:
    entries = [
        {"resource": one, "request": {"method": "PUT", "url": f"{one['resourceType']}/{one['id']}"}}
        for one in resources
    ]
    bundle = json.dumps({"resourceType": "Bundle", "type": "batch", "entry": entries}).encode()
    headers = {"Content-Type": "application/fhir+json"}
    if token := os.environ.get("FHIR_TOKEN"):
        headers["Authorization"] = f"Bearer {token}"
    request = urllib.request.Request(base_url, bundle, headers)  # noqa: S310 - the address of our own test server
    with urllib.request.urlopen(request, timeout=SLOWEST) as answer:  # noqa: S310
        fates = json.load(answer)["entry"]
    return sum(one["response"]["status"].startswith("2") for one in fates)


if __name__ == "__main__":
    try:
        taken, refused = load(sys.argv[1], Path(sys.argv[2]))
    except (OSError, urllib.error.URLError) as error:
        sys.exit(f"the folder cannot be loaded into {sys.argv[1]}: {error}")
    if not taken:
        sys.exit(f"{sys.argv[2]} holds no *.ndjson with resources that the server takes")
    sys.stdout.write(f"{taken} resources taken, {refused} lines refused\n")
