"""Exchange of contact graphs with libpysal and with GAL and GWT files.

GAL and GWT are read here and not by libpysal, because its readers (4.14) drop without a word an
edge to an id that has no line of its own, and turn the id ``007`` into the number 7.
"""

from __future__ import annotations

import os
import warnings
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from twicetold.catalogue.notes import shown
from twicetold.errors import GraphError, TwicetoldWarning
from twicetold.graph.build import assemble, tidy_edges
from twicetold.graph.model import ContactGraph
from twicetold.graph.sphere import IntArray, checked_coordinates

if TYPE_CHECKING:
    from libpysal.graph import Graph

#: Largest file of neighbours; 10,000 traditions with 40 neighbours each take a few megabytes.
MOST_BYTES = 256_000_000


def to_libpysal(graph: ContactGraph, ids: Sequence[str] | None = None) -> Graph:
    """Contact graph as a binary, symmetric :class:`libpysal.graph.Graph`, isolates included.

    Parameters
    ----------
    graph : ContactGraph
    ids : sequence of str, length n, optional
        Names of the vertices; by default 0 to n - 1.
    """
    import pandas as pd
    from libpysal.graph import Graph

    names = np.arange(graph.n) if ids is None else np.array(_distinct(ids, graph.n), dtype=object)
    lone = np.flatnonzero(graph.degree == 0)
    focal = np.concatenate([np.repeat(np.arange(graph.n), graph.degree), lone])
    neighbour = np.concatenate([graph.indices, lone])
    weight = np.concatenate([np.ones(len(graph.indices), int), np.zeros(len(lone), int)])
    order = np.lexsort((neighbour, focal))
    index = pd.MultiIndex.from_arrays(
        [names[focal[order]], names[neighbour[order]]], names=["focal", "neighbor"]
    )
    return Graph(pd.Series(weight[order], index=index, name="weight"))


def from_libpysal(
    graph: Graph,
    latitude: npt.ArrayLike,
    longitude: npt.ArrayLike,
    *,
    ids: Sequence[Any] | None = None,
    rule: str = "given",
) -> ContactGraph:
    """Contact graph from a :class:`libpysal.graph.Graph`, symmetrised by union.

    Weights are not kept: a pair with a weight other than zero is an edge. No edge is a bridge.

    Parameters
    ----------
    graph : libpysal.graph.Graph
    latitude, longitude : (N,) array_like
        Degrees, in the order of ``ids``, or of ``graph.unique_ids`` without them.
    ids : sequence, length N, optional
        The ids of the graph in the order wanted.
    rule : str
        Recorded as the graph's rule.

    Raises
    ------
    GraphError
        When the graph and the coordinates do not have the same traditions.
    """
    lat, lon = checked_coordinates(latitude, longitude)
    names = list(graph.unique_ids)
    wanted = names if ids is None else list(ids)
    if len(wanted) != len(lat) or len(set(wanted)) != len(wanted) or set(wanted) != set(names):
        raise GraphError(
            f"The libpysal graph has {len(names)} ids, and there are coordinates of {len(lat)} "
            f"traditions under {len(set(wanted))} ids: they must be the same ones."
        )
    at = {name: i for i, name in enumerate(wanted)}
    table = graph.adjacency
    focal, neighbour = (table.index.get_level_values(level) for level in ("focal", "neighbor"))
    ends = [[at[name] for name in side] for side in (focal, neighbour)]
    pairs = np.array(ends, dtype=np.int64).reshape(2, -1).T
    pairs = pairs[(pairs[:, 0] != pairs[:, 1]) & (table.to_numpy() != 0)]
    edges = tidy_edges(len(lat), pairs)
    return assemble(len(lat), edges, edges[:0], lat, lon, rule=rule)


def write_gal(graph: ContactGraph, ids: Sequence[str], path: str | os.PathLike[str]) -> None:
    """Write a contact graph as a GAL file (UTF-8), isolates included.

    Lengths and the flags of bridges are not part of the format, and are not kept.

    Parameters
    ----------
    graph : ContactGraph
    ids : sequence of str, length n
        Without blanks: the format separates ids by them.
    path : path

    Raises
    ------
    GraphError
        When an id holds a blank, is empty, or stands twice.
    """
    names = _distinct(ids, graph.n)
    bad = next((name for name in names if len(name.split()) != 1 or name.strip() != name), None)
    if bad is not None:
        raise GraphError(
            f"A GAL file separates ids by blanks, and the id {bad!r} holds one or is empty. "
            "Give the traditions ids without blanks."
        )
    lines = [str(graph.n)]
    for i, name in enumerate(names):
        near = graph.neighbours(i)
        lines += [f"{name} {len(near)}", " ".join(names[j] for j in near)]
    final = Path(path)
    part = final.with_name(f".{final.name}.part")
    part.write_text("\n".join(lines) + "\n", encoding="utf-8", newline="\n")
    part.replace(final)


def read_neighbours(
    path: str | os.PathLike[str],
    ids: Sequence[str],
    *,
    left_out: Sequence[str] = (),
    withheld: bool = False,
) -> IntArray:
    """Edges of a GAL or GWT file as indices into ``ids``, symmetrised by union.

    Weights of a GWT file are not kept. A tradition the file does not name has no neighbours.

    Parameters
    ----------
    path : path
        File whose name ends in .gal or .gwt.
    ids : sequence of str, length N
        Tradition ids. Where none is exactly as in the file, one that differs only by ``_`` for
        a blank is taken (the usual way out, since the formats cannot hold blanks).
    left_out : sequence of str
        Ids that may stand in the file and are skipped (traditions without coordinates).
    withheld : bool
        Whether the catalogue withholds traditions, whose ids nobody may repeat: then unknown ids
        are skipped with a warning that does not name them.

    Returns
    -------
    (E, 2) ndarray of int32
        i < j, sorted, each once.

    Raises
    ------
    GraphError
        When the file cannot be read or names an unknown tradition.
    """
    file = Path(path)
    readers = {".gal": _gal_pairs, ".gwt": _gwt_pairs}
    if file.suffix.lower() not in readers:
        raise GraphError(
            f"`graph.rule` given:FILE takes a .gal or a .gwt file, got {shown(file.name)}."
        )
    pairs = list(readers[file.suffix.lower()](file.name, _lines(file)))
    at = {name.replace(" ", "_"): i for i, name in enumerate(ids)}
    at |= {name: i for i, name in enumerate(ids)}
    skipped = {x for name in left_out for x in (name, name.replace(" ", "_"))}
    unknown = sorted({name for pair in pairs for name in pair} - at.keys() - skipped)
    if unknown and withheld:
        warnings.warn(
            f"{file.name} names {len(unknown)} traditions that the catalogue does not have or "
            "withholds; their edges are left out.",
            TwicetoldWarning,
            stacklevel=2,
        )
    elif unknown:
        raise GraphError(
            f"{file.name} names {len(unknown)} traditions that the catalogue does not have: "
            f"{', '.join(map(_said, unknown[:5]))}{' ...' if len(unknown) > 5 else ''}. "
            "Write its ids as they stand in the traditions table."
        )
    known = [(at[a], at[b]) for a, b in pairs if a in at and b in at and at[a] != at[b]]
    return tidy_edges(len(ids), np.array(known, dtype=np.int64).reshape(-1, 2))


def _lines(file: Path) -> list[str]:
    try:
        if file.exists() and not (file.is_file() or file.is_dir()):
            # A pipe or a device may never end.
            raise GraphError(f"The neighbours file {file.name} is not a file. Give a real one.")
        if file.is_file() and file.stat().st_size > MOST_BYTES:
            raise GraphError(
                f"{file.name} is over {MOST_BYTES // 10**6} MB, which no contact graph needs. "
                "Check that it is the right file."
            )
        return file.read_text(encoding="utf-8-sig").splitlines()
    except UnicodeDecodeError:
        raise GraphError(f"{file.name} is not UTF-8 text; save it as UTF-8.") from None
    except OSError as error:
        raise GraphError(
            f"The neighbours file {file.name} cannot be read ({error.strerror}). "
            "Give its path as seen from the folder you are in."
        ) from None
    except GraphError:
        raise
    except ValueError:  # a NUL: no file can be named so
        raise GraphError("`graph.rule` given:FILE must name a file.") from None


def _said(word: str) -> str:
    """Give an id as it is where a message can hold it, else quoted and shortened."""
    return word if word.isprintable() and len(word) <= 60 else shown(word)


def _gal_pairs(name: str, lines: list[str]) -> Iterator[tuple[str, str]]:
    """Pairs of a GAL file: a header, then for each id a line `id count` and a line of ids."""
    header = lines[0].split() if lines else []
    size = header[0] if len(header) == 1 else "".join(header[1:2])
    if not (size.isdecimal() and header[0].isdecimal() and len(size) <= 18):
        raise GraphError(f"{name}, line 1: a GAL file starts with the number of traditions.")
    words = iter([(w, row) for row, line in enumerate(lines[1:], 2) for w in line.split()])
    blocks = 0
    for focal, row in words:
        count = next(words, ("", row))[0]
        if not (count.isdecimal() and len(count) <= 18):
            raise GraphError(
                f"{name}, line {row}: expected a tradition id and its number of neighbours, "
                f"got {shown(focal)} and {shown(count)}."
            )
        for _ in range(int(count)):
            neighbour, _ = next(words, ("", 0))
            if not neighbour:
                raise GraphError(
                    f"{name}, line {row}: {_said(focal)} should have {count} neighbours, "
                    "and the file ends before."
                )
            yield focal, neighbour
        yield focal, focal
        blocks += 1
    if blocks != int(size):
        raise GraphError(f"{name} announces {size} traditions on line 1 and lists {blocks}.")


def _gwt_pairs(name: str, lines: list[str]) -> Iterator[tuple[str, str]]:
    """Pairs of a GWT file: a header, then lines `id id weight`."""
    if not lines:
        raise GraphError(f"{name} is empty; a GWT file starts with a header line.")
    for row, line in enumerate(lines[1:], 2):
        words = line.split()
        if len(words) not in (0, 3):
            raise GraphError(
                f"{name}, line {row}: expected two tradition ids and a weight, "
                f"got {shown(line.strip())}."
            )
        if words:
            yield words[0], words[1]


def _distinct(ids: Sequence[str], n: int) -> list[str]:
    names = list(ids)
    if len(names) != n or len(set(names)) != n:
        raise GraphError(
            f"`ids` must name each of the {n} traditions once, got {len(names)} ids, "
            f"{len(set(names))} of them different."
        )
    return names
