"""Kills, full disks, read-only folders and two runs at once: all of a result, or nothing.

    pytest -m reliability tests/reliability -s

writes what it counted to reports/reliability/interruption.md.
"""

from __future__ import annotations

import hashlib
import itertools
import json
import multiprocessing
import os
import platform
import random
import resource
import subprocess
import sys
import time
from collections import Counter
from pathlib import Path

import pytest
from child import command, hold

from small_world import put, small_world

pytestmark = pytest.mark.reliability

REPO = Path(__file__).resolve().parents[2]
REPORT = REPO / "reports" / "reliability" / "interruption.md"
TRIALS = int(os.environ.get("TWICETOLD_TRIALS", "15"))
CONSOLE = [sys.executable, "-m", "twicetold.cli"]
QUICK = ["--worlds", "emergence,ancestry", "--draws", "499", "--workers", "2"]
RESULTS: dict[str, list[str]] = {}

warm = multiprocessing.get_context("forkserver")
warm.set_forkserver_preload(
    ["twicetold.cli", "twicetold.run", "twicetold.evidence.ranking", "twicetold.report",
     "twicetold.report.supplement", "twicetold.catalogue"]
)  # fmt: skip


def contents(folder: Path) -> dict[str, bytes]:
    found = {p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*.*")
             if p.is_file()}  # fmt: skip
    found.pop("timings.json", None)  # seconds are not results
    return found


@pytest.fixture(autouse=True)
def counted():
    """Say what each test counted as soon as it has: the whole takes long."""
    before = set(RESULTS)
    yield
    for name in RESULTS.keys() - before:
        print(f"\n{name}: {'; '.join(RESULTS[name])}")


def differing(one, other) -> list[str]:
    """Names of the files that are not the same in both."""
    other = other or {}
    return sorted(k for k in one.keys() | other.keys() if one.get(k) != other.get(k))


class Bench:
    """Runs commands in a folder, to the end or until killed."""

    def __init__(self, folder: Path, **env: str) -> None:
        self.folder = folder
        self.log = folder.parent / "log.txt"
        self.env = env

    def start(self, words):
        arguments = ([str(w) for w in words], str(self.log), self.env)
        process = warm.Process(target=command, args=arguments)
        process.start()
        return process

    def finish(self, words) -> tuple[int, float]:
        began = time.perf_counter()
        process = self.start(words)
        process.join(300)
        return process.exitcode, time.perf_counter() - began

    def kill(self, words, after: float) -> bool:
        """Start, and kill after so many seconds; whether it was still running."""
        process = self.start(words)
        process.join(after)
        running = process.is_alive()
        process.kill()
        process.join()
        return running

    def hidden(self) -> list[str]:
        return sorted(p.name for p in self.folder.iterdir() if p.name.startswith("."))


@pytest.fixture(scope="module")
def ground(tmp_path_factory):
    """A catalogue, a finished run, and the folder the commands write into."""
    folder = tmp_path_factory.mktemp("ground")
    (folder / "out").mkdir()
    catalogue = put(small_world(), folder / "catalogue")
    bench = Bench(folder / "out")
    run = folder / "run"
    assert bench.finish(["rank", catalogue, "--out", run, *QUICK])[0] == 0, bench.log.read_text()
    return bench, catalogue, run


def words_of(kind, catalogue, run, out):
    return {
        "rank": ["rank", catalogue, "--out", out, *QUICK],
        "rank --force over an earlier run": [
            "rank", catalogue, "--out", out, "--by", "holders", "--force", *QUICK],
        "test --page": ["test", catalogue, "m3", "--page", out, *QUICK],
        "supplement": ["supplement", run, "--out", out],
    }[kind]  # fmt: skip


KINDS = ("rank", "rank --force over an earlier run", "test --page", "supplement")


@pytest.mark.parametrize("kind", KINDS)
def test_killed_at_any_moment(kind, ground):
    bench, catalogue, run = ground
    out = bench.folder / "RUN"
    words = words_of(kind, catalogue, run, out)
    earlier = words_of("rank", catalogue, run, out)
    replaces = "--force" in words

    def fresh():
        for path in bench.folder.iterdir():
            subprocess.run(["rm", "-rf", path], check=True)
        if replaces:
            assert bench.finish(earlier)[0] == 0
            return contents(out)
        return None

    old = fresh()
    code, seconds = bench.finish(words)
    assert code == 0, bench.log.read_text()
    whole = contents(out)
    assert len(whole) > 5
    assert old != whole
    dice = random.Random(f"{kind} 1")
    seen: Counter[str] = Counter()
    for _ in range(TRIALS):
        old = fresh()
        killed = bench.kill(words, dice.uniform(0.0, 1.05 * seconds))
        seen["killed while running" if killed else "finished before the kill"] += 1
        if any(".part-" in name for name in bench.hidden()):
            seen["killed while writing"] += 1
        if out.exists():
            found = contents(out)
            assert found in (whole, old), (differing(found, whole), differing(found, old))
            seen["whole result there" if found == whole else "earlier run untouched"] += 1
        elif replaces:
            # Between the two renames: the earlier run waits under its hidden name.
            (kept,) = [n for n in bench.hidden() if ".old-" in n]
            assert contents(bench.folder / kept) == old
            seen["caught between the two renames"] += 1
        else:
            seen["nothing there"] += 1
        code, _ = bench.finish(words)
        if not replaces and code == 2:
            assert "--force" in bench.log.read_text()
            code, _ = bench.finish([*words, "--force"])
        assert code == 0, bench.log.read_text()
        assert differing(contents(out), whole) == []
        assert bench.hidden() == []
    RESULTS[f"kill -9: {kind}"] = [
        f"{TRIALS} trials over {seconds:.1f} s", *(f"{seen[k]} {k}" for k in sorted(seen)),
        "every next run equal to the byte",
    ]  # fmt: skip


def test_killed_while_modules_load_and_kernels_compile(ground, tmp_path):
    """Real processes from a cold start, with an empty cache of compiled kernels."""
    _, catalogue, run = ground
    whole = contents(run)
    trials = max(5, TRIALS // 4)
    dice = random.Random(2)
    cold = os.environ | {"NUMBA_CACHE_DIR": str(tmp_path / "kernels")}
    for k in range(trials):
        out = tmp_path / f"RUN{k}"
        words = [*CONSOLE, *map(str, words_of("rank", catalogue, run, out))]
        process = subprocess.Popen(
            words, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, env=cold
        )
        time.sleep(dice.uniform(0.0, 12.0))
        process.kill()
        process.wait()
        done = subprocess.run(
            [*words, "--force"], capture_output=True, text=True, check=False, env=cold
        )
        assert done.returncode == 0, done.stderr
        assert differing(contents(out), whole) == []
    left = [p.name for p in tmp_path.iterdir() if p.name.startswith(".")]
    assert left == []
    RESULTS["kill -9: cold start"] = [
        f"{trials} trials, the first with no compiled kernels kept",
        "every next run equal to the byte",
    ]


BANKS = """[spread]
turnover = 0.9
[evidence]
draws = 499
walks = 1000
[sensitivity]
hidden = false
"""


class Kept:
    """All worlds of a small catalogue, with a cache of their own."""

    def __init__(self, folder: Path, kind: str) -> None:
        self.cache, self.out = folder / "cache", folder / "out" / "RUN"
        self.out.parent.mkdir()
        self.bench = Bench(self.out.parent, TWICETOLD_CACHE=str(self.cache))
        plan = folder / "plan.toml"
        plan.write_text(BANKS)
        catalogue = put(small_world(), folder / "catalogue")
        more = ["--out", self.out] if kind == "rank" else ["m3", "--page", self.out]
        command = "rank" if kind == "rank" else "test"
        self.words = [command, catalogue, *more, "--plan", plan, "--workers", "2"]

    def clear(self, *, cache: bool) -> None:
        for path in (self.out, *([self.cache] if cache else [])):
            subprocess.run(["rm", "-rf", path], check=True)

    def pieces(self) -> dict[str, bytes]:
        """Every finished piece, by entry and name."""
        return {
            p.relative_to(self.cache).as_posix(): p.read_bytes()
            for p in sorted(self.cache.glob("banks/*/*.bin"))
        }

    def parts(self) -> list[Path]:
        """Pieces that were being written when the run was killed."""
        return list(self.cache.glob("banks/*/.*"))

    def whole(self) -> tuple[dict[str, bytes], dict[str, bytes]]:
        """Run to the end; give the result and the cache."""
        code, _ = self.bench.finish(self.words)
        assert code == 0, self.bench.log.read_text()
        return contents(self.out), self.pieces()

    @property
    def said_damaged(self) -> bool:
        return "damaged piece" in self.bench.log.read_text()


def is_whole(piece: bytes) -> bool:
    """Whether a piece is its content behind the content's own hash."""
    return hashlib.sha256(piece[32:]).digest() == piece[:32]


@pytest.mark.parametrize("kind", ["rank", "test --page"])
def test_killed_while_banks_are_made(kind, tmp_path):
    """Kills between the first piece of the cache and the last; the next run goes on from them."""
    kept = Kept(tmp_path, kind)
    kept.whole()  # nothing is left to compile
    kept.clear(cache=True)
    began = time.time()
    result, cache = kept.whole()
    written = sorted(p.stat().st_mtime - began for p in kept.cache.glob("banks/*/*.bin"))
    assert {name.split("/")[-1].split("-")[0] for name in cache} == {"laws.bin", "walks", "model"}
    dice = random.Random(f"banks {kind}")
    seen: Counter[str] = Counter()
    trials = max(12, TRIALS)
    for k in itertools.count():
        if seen["kills while pieces were being made"] == trials:
            break
        kept.clear(cache=True)
        # The learning takes most of the time: three in four fall among the other pieces.
        last = written[-1] if k % 4 == 0 else written[-2]
        assert kept.bench.kill(kept.words, dice.uniform(0.8 * written[0], last))
        left, parts = kept.pieces(), kept.parts()
        if len(left) == len(cache) or not kept.cache.exists():
            seen["others before the first or after the last"] += 1
        else:
            seen["kills while pieces were being made"] += 1
            seen["of them with a piece half written"] += bool(parts)
            seen["of them during the learning"] += len(left) == len(cache) - 1
            seen["pieces there already"] += len(left)
        assert all(is_whole(piece) for piece in left.values())
        assert left.items() <= cache.items()
        assert not kept.out.exists()
        again, after = kept.whole()
        assert not kept.said_damaged
        assert differing(again, result) == []
        assert differing(after, cache) == []
        assert kept.bench.hidden() == []
    RESULTS[f"kill -9 while banks are made: {kind}"] = [
        f"{seen.pop('kills while pieces were being made')} kills while the {len(cache)} pieces "
        "of the cache were being made",
        *(f"{seen[k]} {k}" for k in sorted(seen)),
        "every piece left was whole and as in the undisturbed run; every next run and its cache "
        "equal to the byte",
    ]


def test_damaged_pieces_of_the_cache_are_made_again(tmp_path):
    kept = Kept(tmp_path, "rank")
    result, cache = kept.whole()
    kinds = {
        "laws of a world": next(n for n in cache if n.endswith("/laws.bin")),
        "walks of a bank": next(n for n in cache if n.endswith("/walks-00031.bin")),
        "the learnt model": next(n for n in cache if "/model-" in n),
    }
    damages = {
        "a bit turned": lambda raw: raw[: len(raw) // 2] + bytes([raw[len(raw) // 2] ^ 1])
        + raw[len(raw) // 2 + 1 :],
        "cut short": lambda raw: raw[: len(raw) // 3],
        "empty": lambda raw: b"",
        "other bytes": lambda raw: random.Random(1).randbytes(len(raw)),
        "zeros": lambda raw: bytes(len(raw)),
    }  # fmt: skip
    for entry in kept.cache.glob("banks/*"):  # what a run killed while writing leaves
        whole_piece = next(entry.glob("*.bin"))
        half = entry / f".{whole_piece.stem}.part-1-0badcafe"
        half.write_bytes(whole_piece.read_bytes()[:1000])
    for name, place in kinds.items():
        for damage in damages.values():
            path = kept.cache / place
            path.write_bytes(damage(cache[place]))
            if name == "walks of a bank":  # read only where a model must be learnt from them
                (kept.cache / kinds["the learnt model"]).unlink()
            kept.clear(cache=False)
            again, after = kept.whole()
            assert kept.said_damaged
            assert differing(again, result) == []
            assert differing(after, cache) == []
    RESULTS["damaged pieces of the cache"] = [
        f"{len(kinds) * len(damages)} ({', '.join(kinds)}; {', '.join(damages)}), with half a "
        "piece under its hidden name in every entry",
        "each was said, thrown away and made again; results and cache equal to the byte",
    ]


@pytest.mark.parametrize("kind", ["rank", "test --page", "supplement"])
def test_full_disk(kind, ground, tmp_path):
    """A file system of one size after another, too small for the whole result."""
    _, catalogue, run = ground
    disk = tmp_path / "disk"
    disk.mkdir()
    seen: Counter[str] = Counter()
    for kilobytes in (8, 64, 200, 400, 800, 1600):
        mounted = subprocess.run(
            ["mount", "-t", "tmpfs", "-o", f"size={kilobytes}k", "tmpfs", disk],
            capture_output=True, check=False,
        )  # fmt: skip
        if mounted.returncode:
            pytest.skip("no file system can be mounted here")
        try:
            done = subprocess.run(
                [*CONSOLE,
                 *map(str, words_of(kind, catalogue, run, disk / "RUN"))],
                capture_output=True, text=True, check=False,
            )  # fmt: skip
            assert "Traceback" not in done.stderr
            left = sorted(p.name for p in disk.iterdir())
            if done.returncode:
                assert done.returncode == 2, done.stderr
                assert "No space left on device" in done.stderr
                assert left == []
                seen["refused, nothing left"] += 1
            else:
                assert left == ["RUN"]
                seen["large enough"] += 1
        finally:
            subprocess.run(["umount", disk], check=True)
    assert seen["refused, nothing left"] >= 1
    RESULTS[f"full disk: {kind}"] = [f"{n} {what}" for what, n in sorted(seen.items())]


@pytest.mark.parametrize("kind", ["rank", "test --page", "supplement"])
def test_files_limited_in_size(kind, ground, tmp_path):
    _, catalogue, run = ground
    out = tmp_path / "RUN"

    def small_files():
        resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))

    done = subprocess.run(
        [*CONSOLE, *map(str, words_of(kind, catalogue, run, out))],
        capture_output=True, text=True, check=False, preexec_fn=small_files,
    )  # fmt: skip
    assert done.returncode == 2, done.stderr
    assert "File too large" in done.stderr
    assert "Traceback" not in done.stderr
    assert list(tmp_path.iterdir()) == []
    RESULTS[f"file size limit: {kind}"] = ["refused, nothing left"]


@pytest.mark.parametrize("kind", ["rank", "test --page", "supplement"])
def test_read_only_folder(kind, ground, tmp_path):
    _, catalogue, run = ground
    disk = tmp_path / "disk"
    disk.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "ro", "tmpfs", disk]
    if subprocess.run(mount, capture_output=True, check=False).returncode:
        disk.chmod(0o555)
        if os.access(disk, os.W_OK):
            pytest.skip("no folder can be made read-only here")
    try:
        words = words_of(kind, catalogue, run, disk / "RUN")
        began = time.perf_counter()
        done = subprocess.run(
            [*CONSOLE, *map(str, words)],
            capture_output=True, text=True, check=False,
        )  # fmt: skip
        seconds = time.perf_counter() - began
    finally:
        if os.path.ismount(disk):
            subprocess.run(["umount", disk], check=True)
    assert done.returncode == 2
    assert "cannot be written to" in done.stderr
    assert "Traceback" not in done.stderr
    RESULTS[f"read-only folder: {kind}"] = [f"refused before the work ({seconds:.1f} s)"]


def test_two_runs_into_one_folder(ground, tmp_path):
    bench, catalogue, run = ground
    out, ready, go = tmp_path / "RUN", tmp_path / "ready", tmp_path / "go"
    first = warm.Process(target=hold, args=(str(out), str(ready), str(go)))
    first.start()
    while not ready.exists():
        time.sleep(0.01)
    for kind in KINDS:
        code, _ = bench.finish(words_of(kind, catalogue, run, out))
        said = bench.log.read_text()
        assert code == 2
        assert "Another run is writing RUN" in said
        assert "Traceback" not in said
    go.touch()
    first.join(30)
    assert first.exitcode == 0
    assert json.loads((out / "run.json").read_text()) == {}
    # Now for real: two runs started together, many times; one of them wins, the other is told.
    codes: Counter[tuple[int, ...]] = Counter()
    whole = contents(run)
    trials = max(5, TRIALS // 4)
    for k in range(trials):
        both = tmp_path / f"BOTH{k}"
        pair = [bench.start(words_of("rank", catalogue, run, both)) for _ in range(2)]
        for process in pair:
            process.join(120)
        codes[tuple(sorted(p.exitcode for p in pair))] += 1
        assert contents(both) == whole
    assert set(codes) == {(0, 2)}
    assert [p.name for p in tmp_path.iterdir() if p.name.startswith(".")] == []
    RESULTS["two runs into one folder"] = [
        f"{len(KINDS)} commands refused while another run held the name",
        f"{trials} pairs started together: one result equal to the byte, the other refused, "
        "each time",
    ]


def test_report():
    """Write down what was counted; only a whole run of this file may do so."""
    if len(RESULTS) < 18:
        pytest.skip("not all of the trials were run")
    kills = sum(int(v[0].split()[0]) for k, v in RESULTS.items() if k.startswith("kill"))
    lines = [
        "# Interruption: kills, full disks, read-only folders, two runs at once",
        "",
        f"    TWICETOLD_TRIALS={TRIALS} pytest -m reliability tests/reliability",
        "",
        f"Python {platform.python_version()}, {platform.system()}, {os.cpu_count()} processors. "
        f"{kills} kills in all, at uniformly random moments of a command's whole length. After "
        "each, the same command was run again and its folder compared byte by byte with that of "
        "a run that was left alone (all files but timings.json); hidden files left over: none.",
        "",
        "| trial | what came out |",
        "|---|---|",
        *(f"| {name} | {'; '.join(said)} |" for name, said in RESULTS.items()),
        "",
    ]
    REPORT.parent.mkdir(parents=True, exist_ok=True)
    REPORT.write_text("\n".join(lines), encoding="utf-8")
