"""The shares bank: what is drawn, that nothing hangs on workers, and the cache's manners."""

from __future__ import annotations

import dataclasses
import os
import subprocess
import sys
import textwrap
import time

import numpy as np
import pytest

from twicetold.evidence.shares import bank as bank_module
from twicetold.evidence.shares import (
    build_bank,
    cache_folder,
    clear_cache,
    estimate_cost,
    fit_posterior,
)
from twicetold.evidence.shares import cache as cache_module
from twicetold.evidence.shares.bank import CHUNK, KEPT, draw_counts, draw_shares, drawn_density
from twicetold.evidence.shares.cache import Entry, key_of, make_room, open_entry
from twicetold.evidence.shares.simplex import _quadrature, hat_masses, simplex
from twicetold.spread import SpreadError, SpreadModel
from twicetold.workers import ThreadPool
from zoo import as_contact_graph

FIELDS = ("shares", "prior", "counts", "weight", "summaries")


@pytest.fixture(autouse=True)
def own_cache(tmp_path, monkeypatch):
    monkeypatch.setenv("TWICETOLD_CACHE", str(tmp_path / "cache"))
    monkeypatch.delenv("TWICETOLD_CACHE_MB", raising=False)
    return tmp_path / "cache"


def ladder_model(families=5, n=40, **more):
    edges = [(i, i + 2) for i in range(n - 2)] + [(i, i + 1) for i in range(n - 1)]
    family = np.arange(n) // (n // families) if families else None
    return SpreadModel(as_contact_graph(n, edges), 0.9, family=family, **more)


def same(a, b):
    for name in FIELDS:
        np.testing.assert_array_equal(getattr(a, name), getattr(b, name), err_msg=name)


def test_shares_are_flat_once_weighted():
    rng = np.random.default_rng(1)
    for routes in (2, 3):
        shares, prior = draw_shares(rng, 200_000, routes)
        np.testing.assert_allclose(shares.sum(axis=1), 1.0)
        assert prior.max() <= 2.0 + 1e-9
        error = 4 * prior.std() / np.sqrt(200_000)
        assert prior.mean() == pytest.approx(1.0, abs=error)
        for r in range(routes):
            # Flat Dirichlet: mean 1/r, second moment 2 / (r (r + 1)). [E]
            for power, exact in ((1, 1 / routes), (2, 2 / (routes * (routes + 1)))):
                drawn = prior * shares[:, r] ** power
                assert drawn.mean() == pytest.approx(exact, abs=4 * drawn.std() / 200_000**0.5)


@pytest.mark.parametrize("routes", [2, 3])
def test_shares_are_drawn_from_the_density_said(routes):
    # The hats' masses by quadrature against their frequencies among the draws.
    where = simplex(routes)
    shares, _ = draw_shares(np.random.default_rng(3), 100_000, routes)
    knots, inside = where.locate(shares)
    found = np.bincount(knots.ravel(), inside.ravel(), len(where.knots)) / 100_000
    said = hat_masses(routes, drawn_density)
    np.testing.assert_allclose(found, said, atol=4 * np.sqrt(said.max() / 100_000))
    flat = hat_masses(routes, lambda points, _: np.ones(len(points)))
    np.testing.assert_allclose(flat, where.prior, rtol=1e-9)
    # The density integrates to 1 over the flat one.
    assert drawn_density(_quadrature(routes), routes).mean() == pytest.approx(1.0, abs=2e-3)


@pytest.mark.parametrize("largest", [2, 3, 13, 14, 20, 200, 3000])
def test_counts_cover_their_range_and_increase(largest):
    counts = draw_counts(np.random.default_rng(2), 4000, largest)
    assert counts.shape[1] == min(KEPT, largest - 1)
    assert np.all(np.diff(counts, axis=1) > 0)
    assert counts.min() == 2
    assert counts.max() == largest
    seen = np.bincount(counts.ravel(), minlength=largest + 1)[2:]
    if largest <= 200:
        assert seen.min() > 0


def test_bank_is_the_same_for_any_number_of_workers():
    model = ladder_model(propensity=np.linspace(1, 3, 40), recorded=np.full(40, 0.8))
    banks = [
        build_bank(model, largest=20, seed=3, walks=130, pool=ThreadPool(w), use_cache=False)
        for w in (1, 2, 4)
    ]
    same(banks[0], banks[1])
    same(banks[0], banks[2])
    more = build_bank(model, largest=20, seed=3, walks=230, use_cache=False)
    np.testing.assert_array_equal(more.weight[:100], banks[0].weight[:100])
    other = build_bank(model, largest=20, seed=4, walks=130, use_cache=False)
    assert not np.array_equal(other.weight, banks[0].weight)


def test_bank_records_are_whole():
    bank = build_bank(ladder_model(), largest=20, seed=3, walks=200, use_cache=False)
    assert bank.walks == 200
    assert bank.routes == 3
    there = bank.weight > 0
    assert there[bank.counts <= 20].all()  # a walk to 20 passes every count below
    joins = bank.summaries[..., 0] + bank.summaries[..., 1]
    groups = bank.summaries[..., 2]
    assert np.all(groups[there] >= 1)
    assert np.all(joins[there] >= (bank.counts - groups)[there])  # a forest has the fewest
    assert np.all(bank.summaries[~there] == 0)
    # About even over counts, as E[weight] falls as 1 / n.
    low, high = bank.counts <= 4, (bank.counts >= 10) & (bank.counts <= 20)
    assert bank.weight[low].mean() == pytest.approx(bank.weight[high].mean(), rel=0.35)
    for name in FIELDS:
        assert not getattr(bank, name).flags.writeable


def test_without_families_there_are_two_routes():
    bank = build_bank(ladder_model(families=0), largest=10, seed=1, walks=60, use_cache=False)
    assert bank.routes == 2
    assert np.all(bank.shares[:, 2] == 0)


def test_bad_requests():
    with pytest.raises(SpreadError, match="at least 2"):
        build_bank(SpreadModel(as_contact_graph(1, []), 0.5), largest=1, seed=1)
    with pytest.raises(SpreadError, match="walks"):
        build_bank(ladder_model(), largest=5, seed=1, walks=0)


def test_cache_gives_the_same_bank_and_walks_nothing_twice(monkeypatch):
    model = ladder_model()
    plain = build_bank(model, largest=15, seed=1, walks=120, use_cache=False)
    assert not cache_folder().exists()
    kept = build_bank(model, largest=15, seed=1, walks=120)
    same(plain, kept)

    def nothing(*_):
        raise AssertionError("walked again")

    monkeypatch.setattr(bank_module, "walk", nothing)
    same(plain, build_bank(model, largest=15, seed=1, walks=120))


def test_a_bank_that_was_learnt_from_is_not_read_until_looked_at(monkeypatch):
    arguments = {"largest": 15, "seed": 1, "walks": 120}
    first = build_bank(ladder_model(), **arguments)
    learnt = fit_posterior(first, seed=1, steps=5)
    read = []
    real = Entry.read
    monkeypatch.setattr(Entry, "read", lambda entry, name: read.append(name) or real(entry, name))
    again = build_bank(ladder_model(), **arguments)
    kept = fit_posterior(again, seed=1, steps=5)
    assert read == ["model-1-2-5"]
    np.testing.assert_array_equal(kept.ensemble.parameters, learnt.ensemble.parameters)
    for name in ("knots", "prior", "centre", "marginal", "basis"):
        kept_array = getattr(kept.where, name)
        np.testing.assert_array_equal(kept_array, getattr(simplex(3), name))
        assert not kept_array.flags.writeable
    assert (again.walks, again.largest, again.routes) == (120, 15, 3)
    same(first, again)
    assert read[1:] == ["walks-00000", "walks-00001", "walks-00002"]


@pytest.mark.parametrize("damage", ["flip", "cut", "empty"])
def test_a_damaged_model_is_learnt_again(damage):
    arguments = {"largest": 15, "seed": 1, "walks": 120}
    learnt = fit_posterior(build_bank(ladder_model(), **arguments), seed=1, steps=5)
    (path,) = cache_folder().glob("banks/*/model-*.bin")
    whole = path.read_bytes()
    broken = {"flip": whole[:-9] + bytes([whole[-9] ^ 1]) + whole[-8:], "cut": whole[:-50]}
    path.write_bytes(broken.get(damage, b""))
    again = fit_posterior(build_bank(ladder_model(), **arguments), seed=1, steps=5)
    np.testing.assert_array_equal(again.ensemble.parameters, learnt.ensemble.parameters)
    np.testing.assert_array_equal(again.sharpness, learnt.sharpness)
    assert path.read_bytes() == whole


def test_room_is_looked_for_when_an_entry_is_new(monkeypatch):
    looked = []
    monkeypatch.setattr(cache_module, "make_room", lambda *a, **k: looked.append(a))
    for expected in (1, 1):
        open_entry({"k": 1})
        assert len(looked) == expected
    open_entry({"k": 2}).finish()
    assert len(looked) == 3


def test_interrupt_keeps_what_is_done(monkeypatch):
    model = ladder_model()

    def stop(label, done, total):
        if done == 2:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        build_bank(model, largest=15, seed=1, walks=5 * CHUNK, pool=ThreadPool(1, stop))
    pieces = sorted(p.name for p in cache_folder().glob("banks/*/*"))
    assert pieces == ["walks-00000.bin", "walks-00001.bin"]
    walked = []
    real = bank_module.walk
    monkeypatch.setattr(bank_module, "walk", lambda *a: walked.append(1) or real(*a))
    bank = build_bank(model, largest=15, seed=1, walks=5 * CHUNK)
    assert len(walked) == 3 * CHUNK
    same(bank, build_bank(model, largest=15, seed=1, walks=5 * CHUNK, use_cache=False))


def test_a_killed_run_is_gone_on_with(own_cache):
    code = """
        import sys
        sys.path.insert(0, sys.argv[1])
        from test_bank import ladder_model
        from twicetold.evidence.shares import build_bank
        from twicetold.workers import ThreadPool
        build_bank(ladder_model(), largest=15, seed=1, walks=40_000, pool=ThreadPool(2))
    """
    here = os.path.dirname(__file__)
    env = dict(os.environ)
    env["PYTHONPATH"] = os.pathsep.join([os.path.dirname(here), env.get("PYTHONPATH", "")])
    child = subprocess.Popen([sys.executable, "-c", textwrap.dedent(code), here], env=env)
    try:
        limit = time.monotonic() + 120
        while len(list(own_cache.glob("banks/*/walks-*.bin"))) < 8:
            assert child.poll() is None, "the run ended by itself"
            assert time.monotonic() < limit
            time.sleep(0.01)
    finally:
        child.kill()
        child.wait()
    done = {p.name: p.stat().st_mtime_ns for p in own_cache.glob("banks/*/walks-*.bin")}
    assert 8 <= len(done) < 800
    # The first eight pieces (in whatever order they came) are whole and are not made again.
    (folder,) = own_cache.glob("banks/*")
    entry = Entry(folder)
    assert all(entry.read(name.removesuffix(".bin")) is not None for name in done)
    short = build_bank(ladder_model(), largest=15, seed=1, walks=8 * CHUNK, use_cache=False)
    first = entry.read("walks-00000")
    np.testing.assert_array_equal(first["weight"], short.weight[:CHUNK])
    assert {p.name: p.stat().st_mtime_ns for p in folder.glob("walks-*.bin")} == done


@pytest.mark.parametrize("damage", ["flip", "cut", "empty", "junk"])
def test_a_damaged_piece_is_made_again(damage):
    model = ladder_model()
    plain = build_bank(model, largest=15, seed=1, walks=120)
    path = sorted(cache_folder().glob("banks/*/walks-*.bin"))[1]
    content = bytearray(path.read_bytes())
    if damage == "flip":
        content[len(content) // 2] ^= 1
    elif damage == "cut":
        content = content[:-100]
    elif damage == "empty":
        content = bytearray()
    else:
        content = bytearray(b"x" * 500)
    path.write_bytes(content)
    same(plain, build_bank(model, largest=15, seed=1, walks=120))
    same(plain, build_bank(model, largest=15, seed=1, walks=120, use_cache=False))
    assert path.exists()


CHANGES = {
    "turnover": 0.91,
    "reach": 1.5,
    "recorded": np.full(40, 0.5),
    "propensity": np.linspace(1, 2, 40),
    "family": np.arange(40) // 4,
    "graph": as_contact_graph(40, [(i, i + 1) for i in range(39)]),
}


@pytest.mark.parametrize("change", CHANGES)
def test_key_hangs_on_everything_that_matters(change):
    model = ladder_model()
    changed = dataclasses.replace(model, **{change: CHANGES[change]})
    for m in (model, changed):
        build_bank(m, largest=5, seed=1, walks=1)
    assert len(list(cache_folder().glob("banks/*"))) == 2


def test_key_does_not_hang_on_shares_or_family_names():
    model = ladder_model()
    build_bank(model, largest=5, seed=1, walks=1)
    build_bank(dataclasses.replace(model, shares=(1.0, 0.0, 0.0)), largest=5, seed=1, walks=1)
    build_bank(dataclasses.replace(model, family=model.family * 7 + 3), largest=5, seed=1, walks=1)
    assert len(list(cache_folder().glob("banks/*"))) == 1
    build_bank(model, largest=6, seed=1, walks=1)
    build_bank(model, largest=5, seed=2, walks=1)
    build_bank(model, largest=5, seed=1, walks=2)
    assert len(list(cache_folder().glob("banks/*"))) == 4


def test_key_tells_arrays_apart():
    assert key_of({"a": np.zeros(2)}) != key_of({"a": np.zeros((2, 1))})
    assert key_of({"a": np.zeros(2)}) != key_of({"a": np.zeros(4, dtype=np.float32)})
    assert key_of({"a": 1, "b": 2}) == key_of({"b": 2, "a": 1})


def test_room_is_made_oldest_first(monkeypatch, own_cache):
    entries = [open_entry({"k": k}) for k in range(4)]
    for age, entry in enumerate(entries):
        entry.write("piece", {"a": np.zeros(100_000)})  # 0.8 MB
        os.utime(entry.folder, (1e9 + age, 1e9 + age))
    others = own_cache / "banks" / "notes.txt"
    others.write_text("mine")
    monkeypatch.setenv("TWICETOLD_CACHE_MB", "1.7")
    make_room(own_cache / "banks", keep=entries[0].folder.name)
    assert [e.folder.exists() for e in entries] == [True, False, False, True]
    assert others.exists()
    clear_cache()
    assert not any(e.folder.exists() for e in entries)
    assert others.exists()


def test_a_finished_bank_stays_even_when_it_alone_passes_the_limit(monkeypatch, own_cache):
    old = open_entry({"k": 1})
    old.write("piece", {"a": np.zeros(1000)})
    os.utime(old.folder, (1e9, 1e9))
    monkeypatch.setenv("TWICETOLD_CACHE_MB", "0")
    build_bank(ladder_model(), largest=5, seed=1, walks=60)
    (left,) = own_cache.glob("banks/*")
    assert left != old.folder
    assert len(list(left.glob("walks-*.bin"))) == 2


def test_half_written_pieces_are_swept(own_cache):
    entry = open_entry({"k": 1})
    old, fresh = entry.folder / ".a.part-1-x", entry.folder / ".b.part-1-x"
    for path in (old, fresh):
        path.write_bytes(b"x")
    os.utime(old, (1e9, 1e9))
    make_room(own_cache / "banks")
    assert not old.exists()
    assert fresh.exists()


def test_a_cache_that_cannot_be_kept_does_not_stop_a_run(monkeypatch, tmp_path):
    blocked = tmp_path / "file"
    blocked.write_text("not a folder")
    monkeypatch.setenv("TWICETOLD_CACHE", str(blocked))
    bank = build_bank(ladder_model(), largest=5, seed=1, walks=10)
    assert bank.entry is None


def test_cache_folder_follows_the_platform(monkeypatch, tmp_path):
    monkeypatch.delenv("TWICETOLD_CACHE")
    monkeypatch.setattr(sys, "platform", "linux")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    assert cache_folder() == tmp_path / "twicetold"
    monkeypatch.delenv("XDG_CACHE_HOME")
    monkeypatch.setenv("HOME", str(tmp_path / "home"))
    assert cache_folder() == tmp_path / "home" / ".cache" / "twicetold"


def test_cost_grows_with_walks_and_shrinks_with_workers():
    model = ladder_model()
    one = estimate_cost(model, largest=15, walks=1000)
    assert 0.0 < one < 60.0
    assert estimate_cost(model, largest=15, walks=1000, workers=2) < one * 2
    assert estimate_cost(model, largest=15, walks=100_000) > one * 5
