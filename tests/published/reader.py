"""Reads the published graphs and facts in `data/`, one JSON file each.

Every file names its source, and says in `provenance` what was read there and what is from memory.
"""

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from scheduler.graph import Edge

FOLDER = Path(__file__).parent / "data"


@dataclass(frozen=True)
class Published:
    """A published graph with what is published about it.

    `kinds` and `times` are by node; `document` is the whole file.
    """

    edges: tuple[Edge, ...]
    kinds: Mapping[str, str]
    times: Mapping[str, int]
    document: Mapping[str, Any]

    def fact(self, quantity: str, assumptions: str | None = None) -> Any:
        """The one published value of a quantity; `assumptions` tell several apart."""
        values = [
            fact["value"]
            for fact in self.document["published"]
            if fact["quantity"] == quantity and assumptions in (None, fact["assumptions"])
        ]
        (value,) = values
        return value


def read(name: str) -> Published:
    """The file `data/<name>.json`."""
    document = json.loads((FOLDER / f"{name}.json").read_text(encoding="utf-8"))
    return Published(
        tuple(Edge(edge["from"], edge["to"], edge["delays"]) for edge in document["edges"]),
        {node["id"]: node["kind"] for node in document["nodes"]},
        {node["id"]: node["time"] for node in document["nodes"]},
        document,
    )
