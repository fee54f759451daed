"""The example as CSV tables with their ``about.toml`` and coastline."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from twicetold.example._history import ROUTES, Motif
from twicetold.example._peoples import Peoples

Row = tuple[str | int | float, ...]


@dataclass(frozen=True)
class Archipelago:
    """The whole example: words, peoples, motifs, coastline."""

    words: Mapping[str, Any]
    peoples: Peoples
    motifs: tuple[Motif, ...]
    land: str

    def tradition_id(self, index: int) -> str:
        """Id of a tradition."""
        return f"T{index + 1:03d}"

    def motif_id(self, index: int) -> str:
        """Id of a motif."""
        return f"M{index + 1:03d}"


def sheets(world: Archipelago) -> dict[str, list[Row]]:
    """Tables a catalogue consists of, header first."""
    return {
        "traditions": _traditions(world),
        "motifs": _motifs(world),
        "attestations": _attestations(world),
        "surveyed": _surveyed(world),
    }


def table_files(world: Archipelago) -> dict[str, bytes]:
    """Every file of the folder of tables, by name."""
    tables = sheets(world) | {"truth": truth(world)}
    files = {f"{name}.csv": csv_bytes(rows) for name, rows in tables.items()}
    files["about.toml"] = about(world).encode()
    files["land.geojson"] = world.land.encode()
    return files


def csv_bytes(rows: Iterable[Sequence[str | int | float]]) -> bytes:
    """Write rows as UTF-8 CSV with plain line feeds."""
    text = io.StringIO()
    csv.writer(text, lineterminator="\n").writerows(rows)
    return text.getvalue().encode()


def source_key(region: str) -> str:
    """Key of the invented notebook that holds a region's records."""
    return "notebook-" + region.lower().removeprefix("the ").replace(" ", "-")


def about(world: Archipelago) -> str:
    """What the catalogue says of itself, as TOML."""
    words = world.words
    return (
        f'title = "{words["title"]}"\n'
        f'notice = "{words["notice"]}"\n'
        "invented = true\n"
        f'license = "{words["license"]}"\n'
    )


def _traditions(world: Archipelago) -> list[Row]:
    header = (
        "id", "name", "latitude", "longitude", "family", "branch", "region", "effort",
        "reef_share", "altitude",
    )  # fmt: skip
    rows: list[Row] = [header]
    for i, s in enumerate(world.peoples.sites):
        region = world.words["regions"][s.region]["name"]
        family = world.peoples.family_name(s)
        rows.append(
            (
                world.tradition_id(i),
                s.name,
                s.latitude,
                s.longitude,
                family,
                s.branch,
                region,
                s.effort,
                s.reef_share,
                s.altitude,
            )
        )
    return rows


def _motifs(world: Archipelago) -> list[Row]:
    rows: list[Row] = [("id", "name", "category")]
    rows += [(world.motif_id(k), m.name, m.category) for k, m in enumerate(world.motifs)]
    return rows


def _attestations(world: Archipelago) -> list[Row]:
    regions = world.words["regions"]
    rows: list[Row] = [("motif_id", "tradition_id", "source")]
    for k, motif in enumerate(world.motifs):
        for i in motif.recorded:
            key = source_key(regions[world.peoples.sites[i].region]["name"])
            rows.append((world.motif_id(k), world.tradition_id(i), key))
    return rows


def _surveyed(world: Archipelago) -> list[Row]:
    """Only motifs that were not searched for everywhere; the others were."""
    rows: list[Row] = [("motif_id", "tradition_id")]
    for k, motif in enumerate(world.motifs):
        if not all(motif.searched):
            rows += [
                (world.motif_id(k), world.tradition_id(i))
                for i, asked in enumerate(motif.searched)
                if asked
            ]
    return rows


def truth(world: Archipelago) -> list[Row]:
    """What really happened to each motif."""
    rows: list[Row] = [
        (
            "motif_id",
            "route",
            *(f"{route}_share" for route in ROUTES),
            "gains",
            *(f"{route}_realised" for route in ROUTES),
            "true_holders",
            "recorded_holders",
        )
    ]
    for k, motif in enumerate(world.motifs):
        gains = sum(motif.gained)
        realised = tuple(f"{g / gains:.4f}" for g in motif.gained)
        rows.append(
            (
                world.motif_id(k),
                motif.route,
                *motif.shares,
                gains,
                *realised,
                len(motif.holders),
                len(motif.recorded),
            )
        )
    return rows
