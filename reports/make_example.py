"""Make reports/example: the pages and the deposit of the invented archipelago.

    python reports/make_example.py

Takes a few minutes. Only some of the motif pages are kept, to keep the folder small; the run page's
other links lead nowhere here. A test says when what is kept is no longer what the program makes.
"""

from __future__ import annotations

import hashlib
import json
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

from twicetold.report import page_name

HERE = Path(__file__).resolve().parent
REPO = HERE.parent
CATALOGUE = REPO / "data_examples" / "archipelago"
#: One motif of each kind of history, by what the run says of them.
PAGES = 8


def looks() -> str:
    """SHA-256 of everything that shapes a page or a deposit beside the numbers."""
    digest = hashlib.sha256()
    for path in sorted((REPO / "src" / "twicetold" / "report").rglob("*")):
        if path.is_file() and path.suffix in {".py", ".j2", ".css", ".js", ".json"}:
            digest.update(path.relative_to(REPO).as_posix().encode())
            digest.update(path.read_bytes())
    return digest.hexdigest()


def main() -> None:
    """Rank, deposit, and keep what is small."""
    command = [sys.executable, "-m", "twicetold.cli"]
    target = HERE / "example"
    with tempfile.TemporaryDirectory() as folder:
        run, deposit = Path(folder) / "RUN", Path(folder) / "DEPOSIT"
        subprocess.run(
            [*command, "rank", str(CATALOGUE), "--out", str(run), "--stability"], check=True
        )
        subprocess.run(
            [*command, "supplement", str(run), "--out", str(deposit), "--cldf"], check=True
        )
        shutil.rmtree(target, ignore_errors=True)
        (target / "run" / "motifs").mkdir(parents=True)
        for path in run.iterdir():
            if path.name in {"motifs", "catalogue", "figures", "timings.json"}:
                continue
            (shutil.copytree if path.is_dir() else shutil.copy)(path, target / "run" / path.name)
        for page in chosen(run):
            shutil.copy(run / "motifs" / page, target / "run" / "motifs" / page)
        shutil.copytree(deposit, target / "deposit")
    made = {"command": "python reports/make_example.py", "looks": looks()}
    (target / "made.json").write_text(json.dumps(made, indent=2) + "\n", encoding="utf-8")


def chosen(run: Path) -> list[str]:
    """Pages to keep: the first two motifs of each verdict, in order of rank."""
    import csv

    seen: dict[str, int] = {}
    names = []
    with (run / "motifs.csv").open(encoding="utf-8", newline="") as source:
        for row in csv.DictReader(source):
            seen[row["verdict"]] = seen.get(row["verdict"], 0) + 1
            if seen[row["verdict"]] <= 2 and len(names) < PAGES:
                names.append(page_name(row["motif_id"]))
    return names


if __name__ == "__main__":
    main()
