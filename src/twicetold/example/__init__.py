"""The demonstration catalogue: an invented archipelago whose true history is known.

Everything in it is made up by a seeded script and labelled so: an empty stretch of ocean gets
islands, peoples in families, and motifs that emerge, spread by contact and are inherited by the
spread chain of :mod:`twicetold.spread`, written here a second time and independently.

Layer rule: imports nothing of twicetold but ``errors``, and only the commands import it.
"""

from __future__ import annotations

import json
import os
import tempfile
from functools import lru_cache
from importlib import resources
from pathlib import Path
from typing import Literal

from twicetold.errors import TwicetoldError
from twicetold.example._cldf import cldf_files
from twicetold.example._coast import land_geojson
from twicetold.example._history import tell_stories
from twicetold.example._peoples import make_peoples
from twicetold.example._tables import Archipelago, table_files
from twicetold.example._terrain import make_terrain
from twicetold.example._workbook import workbook_bytes

__all__ = ["FORMS", "SEED", "Archipelago", "example_files", "make_example", "write_example"]

SEED = 1
Form = Literal["tables", "cldf", "workbook"]
FORMS: tuple[Form, ...] = ("tables", "cldf", "workbook")


@lru_cache(maxsize=2)
def make_example(seed: int = SEED) -> Archipelago:
    """Make the archipelago in memory; the same seed gives the same archipelago everywhere."""
    source = resources.files("twicetold.example").joinpath("words.json")
    words = json.loads(source.read_text(encoding="utf-8"))
    terrain = make_terrain(words, seed)
    peoples = make_peoples(terrain, words, seed)
    motifs = tell_stories(peoples.sites, words, seed)
    return Archipelago(words, peoples, tuple(motifs), land_geojson(terrain, words))


def example_files(form: Form = "tables") -> dict[str, bytes]:
    """Give the files of the example, by name.

    Parameters
    ----------
    form : {"tables", "cldf", "workbook"}
        A folder of CSV tables with its truth, a CLDF StructureDataset, or one workbook.

    Raises
    ------
    TwicetoldError
        When the form is none of these.
    """
    world = make_example()
    if form == "tables":
        return table_files(world)
    if form == "cldf":
        return cldf_files(world)
    if form == "workbook":
        return {"archipelago.xlsx": workbook_bytes(world)}
    raise TwicetoldError(f"`form` must be one of {', '.join(FORMS)}, got {form!r}.")


def write_example(folder: str | Path, *, form: Form = "tables", force: bool = False) -> Path:
    """Write the demonstration catalogue into a folder.

    Parameters
    ----------
    folder : path
        Made when it does not exist. Must be empty unless ``force``.
    form : {"tables", "cldf", "workbook"}
        What to write.
    force : bool
        Write over files of the same names; other files in the folder are left alone.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    TwicetoldError
        When the folder holds something already, or cannot be written.
    """
    folder = Path(folder)
    files = example_files(form)
    try:
        if folder.exists() and not folder.is_dir():
            raise TwicetoldError(f"{folder} is a file. Give the name of a folder.")
        if not force and folder.is_dir() and any(folder.iterdir()):
            raise TwicetoldError(
                f"{folder} must be empty or new, and holds something already. Give another "
                "folder, or --force to write over files of the same names."
            )
        folder.mkdir(parents=True, exist_ok=True)
        for name, content in files.items():
            _replace(folder / name, content)
    except OSError as err:
        raise TwicetoldError(f"{folder}: cannot be written ({err.strerror}).") from err
    return folder


def _replace(path: Path, content: bytes) -> None:
    """Write a whole file or nothing."""
    handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
    try:
        with os.fdopen(handle, "wb") as out:
            out.write(content)
        os.chmod(name, 0o644)
        os.replace(name, path)
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise
