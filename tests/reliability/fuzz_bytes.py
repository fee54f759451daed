"""Fuzzing led by coverage, where atheris is installed (no dependency: ``pip install atheris``).

    python tests/reliability/fuzz_bytes.py READER -runs=20000 -timeout=5 -rss_limit_mb=2048

READER is one of ``table``, ``metadata``, ``plan``, ``neighbours``. It stops at the first input that
ends in anything but an answer in words, takes over five seconds, or two gigabytes.
"""
# ruff: noqa: PT017 (no test of pytest's)

from __future__ import annotations

import sys
import tempfile
from pathlib import Path

import atheris

with atheris.instrument_imports(include=["twicetold"]):
    from twicetold.catalogue import check_catalogue
    from twicetold.errors import GraphError, PlanError
    from twicetold.graph.exchange import read_neighbours
    from twicetold.plan import read_plan, recorded_order

FOLDER = Path(tempfile.mkdtemp(prefix="twicetold-fuzz-"))
PLACES = b"tradition_id,name,latitude,longitude,family\nt1,a,1,2,F\nt2,b,3,4,F\nt3,c,5,6,G\n"


def table(data: bytes) -> None:
    """Attestations of any bytes beside sound traditions, or the other way round."""
    folder = FOLDER / "tables"
    folder.mkdir(exist_ok=True)
    here, there = (
        ("traditions", "attestations") if data[:1] < b"@" else ("attestations", "traditions")
    )
    sound = {"traditions": PLACES, "attestations": b"motif_id,tradition_id\nm1,t1\nm1,t2\n"}
    (folder / f"{here}.csv").write_bytes(data[1:])
    (folder / f"{there}.csv").write_bytes(sound[there])
    catalogue, problems = check_catalogue(folder)
    assert catalogue is not None or problems
    assert "could not be read" not in "\n".join(map(str, problems))


def metadata(data: bytes) -> None:
    """CLDF metadata of any bytes."""
    folder = FOLDER / "cldf"
    folder.mkdir(exist_ok=True)
    (folder / "languages.csv").write_text("ID,Latitude,Longitude\na,1,2\nb,3,4\nc,5,6\n")
    (folder / "values.csv").write_text("ID,L,P,V\n1,a,p,x\n2,b,q,y\n")
    path = folder / "x-metadata.json"
    path.write_bytes(data)
    catalogue, problems = check_catalogue(path)
    assert catalogue is not None or problems


def plan(data: bytes) -> None:
    """A plan, or a record, of any bytes."""
    path = FOLDER / "plan.toml"
    path.write_bytes(data)
    for reader in (read_plan, recorded_order):
        try:
            reader(path)
        except PlanError as err:
            assert 0 < len(str(err)) < 2_000


def neighbours(data: bytes) -> None:
    """A GAL or a GWT file of any bytes."""
    path = FOLDER / ("x.gal" if data[:1] < b"@" else "x.gwt")
    path.write_bytes(data[1:])
    try:
        read_neighbours(path, ["t1", "t2", "t3"])
    except GraphError as err:
        assert 0 < len(str(err)) < 2_000


READERS = {"table": table, "metadata": metadata, "plan": plan, "neighbours": neighbours}

if __name__ == "__main__":
    atheris.Setup([sys.argv[0], *sys.argv[2:]], READERS[sys.argv[1]])
    atheris.Fuzz()
