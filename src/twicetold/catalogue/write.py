"""A catalogue as normalised CSV tables: a run's own copy, and what its digest is taken over."""

from __future__ import annotations

import csv
import hashlib
import io
import math
import os
import shutil
from collections.abc import Iterable, Iterator
from pathlib import Path

import numpy as np

from twicetold.catalogue.model import Catalogue, CellState, SourceFile
from twicetold.errors import CatalogueError, Problem

_BUFFER = 1 << 16
_STATE_WORD: dict[int, str] = {
    CellState.ATTESTED: "",
    CellState.NOT_SEARCHED: "not searched",
    CellState.NOT_APPLICABLE: "not applicable",
}


def write_catalogue(catalogue: Catalogue, folder: str | os.PathLike[str]) -> Path:
    """Write the catalogue as a folder of CSV tables that reads back with the same digest.

    Restricted rows are written with their mark, so that reading them again needs the same rule;
    coordinates and other numbers are written with all their digits.

    Parameters
    ----------
    catalogue : Catalogue
    folder : path
        Made if it is not there; must not hold any tables yet.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    CatalogueError
        When the folder holds files already or cannot be written.
    """
    place = Path(folder)
    try:
        if place.exists() and (not place.is_dir() or any(place.iterdir())):
            raise _refusal(place, "is there already and not empty.", "Name a new folder.")
        place.mkdir(parents=True, exist_ok=True)
        for name, pieces in normalised(catalogue):
            with (place / name).open("w", encoding="utf-8", newline="") as handle:
                handle.writelines(pieces)
        if catalogue.land is not None:
            shutil.copyfile(catalogue.land, place / "land.geojson")
    except OSError as exc:
        raise _refusal(
            place,
            f"cannot be written ({exc.strerror or type(exc).__name__}).",
            "Check the place and the space left.",
        ) from exc
    return place


def _refusal(place: Path, what: str, remedy: str) -> CatalogueError:
    return CatalogueError([Problem(place.name or str(place), 0, "", what, remedy)])


def content_record(catalogue: Catalogue) -> SourceFile:
    """Size and SHA-256 of the normalised content, each file preceded by its name."""
    digest = hashlib.sha256()
    size = 0
    for name, pieces in normalised(catalogue):
        digest.update(f"{name}\n".encode())
        for piece in pieces:
            raw = piece.encode("utf-8")
            digest.update(raw)
            size += len(raw)
    return SourceFile("normalised content", size, digest.hexdigest())


def normalised(catalogue: Catalogue) -> Iterator[tuple[str, Iterator[str]]]:
    """File names and their text in pieces, in a fixed order."""
    yield "about.toml", _about(catalogue)
    yield "traditions.csv", _csv(_tradition_rows(catalogue))
    yield "motifs.csv", _csv(_motif_rows(catalogue))
    yield "attestations.csv", _attestations(catalogue)
    if any(_listing(catalogue)):
        yield "surveyed.csv", _csv(_surveyed_rows(catalogue))
    if catalogue.contacts is not None:
        yield "contacts.csv", _csv(_contact_rows(catalogue))


def _csv(rows: Iterable[list[str]]) -> Iterator[str]:
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    for row in rows:
        writer.writerow(row)
        if out.tell() > _BUFFER:
            yield out.getvalue()
            out.seek(0)
            out.truncate()
    yield out.getvalue()


def _about(catalogue: Catalogue) -> Iterator[str]:
    yield f"title = {_toml(catalogue.title)}\n"
    yield f"notice = {_toml(catalogue.notice)}\n"
    yield f"invented = {'true' if catalogue.invented else 'false'}\n"
    yield f"license = {_toml(catalogue.license)}\n"
    yield f"citation = {_toml(catalogue.citation)}\n"


def _toml(text: str) -> str:
    """A TOML basic string; quotes, backslashes and control characters are escaped."""
    out = []
    for sign in text:
        if sign in '"\\':
            out.append("\\" + sign)
        elif ord(sign) < 32 or ord(sign) == 127:
            out.append(f"\\u{ord(sign):04X}")
        else:
            out.append(sign)
    return '"' + "".join(out) + '"'


def number(value: float) -> str:
    """Shortest text that reads back as the same number; blank for NaN."""
    if math.isnan(value):
        return ""
    return str(int(value)) if value.is_integer() and abs(value) < 1e15 else repr(float(value))


def _tradition_rows(catalogue: Catalogue) -> Iterator[list[str]]:
    columns = ["tradition_id", "name", "latitude", "longitude", "family", "branch", "region"]
    columns += ["effort"] if catalogue.effort is not None else []
    yield [*columns, "access", "label", *catalogue.covariates]
    blank = [""] * (len(columns) - 1)
    for i in range(catalogue.n_traditions):
        row = [
            catalogue.tradition_ids[i],
            catalogue.tradition_names[i],
            number(float(catalogue.latitude[i])),
            number(float(catalogue.longitude[i])),
            catalogue.family[i],
            catalogue.branch[i],
            catalogue.region[i],
        ]
        if catalogue.effort is not None:
            row.append(number(float(catalogue.effort[i])))
        row.append("" if catalogue.access[i] == "open" else catalogue.access[i])
        row.append(" | ".join(catalogue.labels.get(catalogue.tradition_ids[i], ())))
        yield row + [number(float(v[i])) for v in catalogue.covariates.values()]
    for identity in catalogue.unlocated:
        yield [identity, *blank, "", "", *("" for _ in catalogue.covariates)]


def _motif_rows(catalogue: Catalogue) -> Iterator[list[str]]:
    yield ["motif_id", "name", "category", "access"]
    for row in zip(
        catalogue.motif_ids,
        catalogue.motif_names,
        catalogue.motif_categories,
        ("" if a == "open" else a for a in catalogue.motif_access),
        strict=True,
    ):
        yield list(row)


def _attestations(catalogue: Catalogue) -> Iterator[str]:
    """One piece of text a motif; ids are quoted once, since there may be millions of rows."""
    yield "motif_id,tradition_id,state\n"
    ids = _quoted(catalogue.tradition_ids)
    listed = _listing(catalogue)
    everybody = [bool(mask.all()) for mask in catalogue.surveyed_sets]
    for k, motif in enumerate(_quoted(catalogue.motif_ids)):
        if everybody[int(catalogue.surveyed_of[k])]:  # then no cell can be "not applicable"
            yield "".join([f"{motif},{ids[i]},\n" for i in catalogue.holders(k).tolist()])
            continue
        states = catalogue.states(k)
        chosen = (states == CellState.ATTESTED) | (states == CellState.NOT_APPLICABLE)
        if not listed[int(catalogue.surveyed_of[k])]:
            chosen |= states == CellState.NOT_SEARCHED
        places = np.flatnonzero(chosen)
        words = map(_STATE_WORD.__getitem__, states[places].tolist())
        pairs = zip(places.tolist(), words, strict=True)
        yield "".join([f"{motif},{ids[i]},{word}\n" for i, word in pairs])


def _quoted(texts: Iterable[str]) -> list[str]:
    """Texts as cells of a CSV row."""
    return [next(_csv([[text, ""]])).removesuffix(",\n") for text in texts]


def _listing(catalogue: Catalogue) -> list[bool]:
    """For each surveyed set, whether naming who was searched takes fewer rows than who was not."""
    out = []
    for mask in catalogue.surveyed_sets:
        searched = int(np.count_nonzero(mask))
        out.append(0 < searched < len(mask) - searched)
    return out


def _surveyed_rows(catalogue: Catalogue) -> Iterator[list[str]]:
    yield ["motif_id", "tradition_id"]
    listed = _listing(catalogue)
    ids = catalogue.tradition_ids
    for k, motif in enumerate(catalogue.motif_ids):
        if listed[int(catalogue.surveyed_of[k])]:
            for i in np.flatnonzero(catalogue.surveyed(k)).tolist():
                yield [motif, ids[i]]


def _contact_rows(catalogue: Catalogue) -> Iterator[list[str]]:
    yield ["tradition_id", "neighbour_id"]
    assert catalogue.contacts is not None
    ids = catalogue.tradition_ids
    for i, j in catalogue.contacts.tolist():
        yield [ids[i], ids[j]]
