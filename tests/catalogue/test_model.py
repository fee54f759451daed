"""What a catalogue answers: motifs by id or name, families, branches, states, chunk borders."""

from __future__ import annotations

import resource
import time

import numpy as np
import pytest
from small_catalogue import write_csv

from twicetold.catalogue import CellState, check_catalogue, read_catalogue
from twicetold.errors import UnknownMotifError


def test_motif_by_id_or_name(sound, tmp_path):
    sound["motifs"].append(["m4", "twin drums", "", ""])
    sound["motifs"].append(["Twin Drums", "Other", "", ""])
    catalogue = read_catalogue(write_csv(sound, tmp_path))
    assert catalogue.motif_ids[catalogue.find_motif("m3")] == "m3"
    assert catalogue.motif_ids[catalogue.find_motif(" a BOAT of stone ")] == "m1"
    assert catalogue.motif_ids[catalogue.find_motif("Twin Drums")] == "Twin Drums"
    with pytest.raises(UnknownMotifError, match=r"belongs to 2 motifs \(m2, m4\)"):
        catalogue.find_motif("twin drums")
    with pytest.raises(UnknownMotifError, match=r"Did you mean: m3 \(A debt of salt\)"):
        catalogue.find_motif("salt")
    with pytest.raises(UnknownMotifError, match="case-sensitive"):
        catalogue.find_motif("nothing such")


def test_families_and_branches(sound, tmp_path):
    sound["traditions"][0].append("branch")
    for row, branch in zip(sound["traditions"][1:], ["a", "b", "a", "a", ""], strict=True):
        row.append(branch)
    catalogue = read_catalogue(write_csv(sound, tmp_path))
    assert catalogue.has_families
    assert catalogue.has_branches
    assert catalogue.family_codes.tolist() == [0, 0, 1, 2]
    assert catalogue.branch_codes.tolist() == [0, 1, 2, 3]  # a branch is one only within its family
    assert not catalogue.family_codes.flags.writeable


def test_states_of_a_motif(sound, tmp_path):
    catalogue = read_catalogue(write_csv(sound, tmp_path))
    states = catalogue.states(catalogue.find_motif("m1"))
    assert states.dtype == np.int8
    assert states.tolist() == [CellState.ATTESTED] * 2 + [CellState.ABSENT] * 2


def test_rows_are_counted_across_chunks(sound, tmp_path):
    for k in range(20_000):
        sound["attestations"].append([f"m{k}", "t1", ""])
    sound["attestations"][19_999] = ["m5", "t77", ""]
    sound["attestations"][8_192] = ["m9", "t2", "", "stray"]
    del sound["motifs"]
    _, problems = check_catalogue(write_csv(sound, tmp_path))
    assert [(p.row, p.column) for p in problems] == [(8_193, ""), (20_000, "tradition_id")]


@pytest.mark.benchmark
def test_five_million_attestations(tmp_path, capsys):
    """100,000 motifs over 10,000 traditions: seconds and peak memory are printed."""
    m, n, rows = 100_000, 10_000, 5_000_000
    rng = np.random.default_rng(1)
    with (tmp_path / "traditions.csv").open("w") as out:
        out.write("tradition_id,latitude,longitude,effort\n")
        points = zip(rng.uniform(-80, 80, n), rng.uniform(-180, 180, n), strict=True)
        out.writelines(f"t{i:05d},{a:.4f},{b:.4f},1\n" for i, (a, b) in enumerate(points))
    keys = np.unique(rng.integers(0, m * n, size=rows + rows // 300))[:rows]
    rng.shuffle(keys)
    with (tmp_path / "attestations.csv").open("w") as out:
        out.write("motif_id,tradition_id\n")
        for part in np.array_split(keys, 50):
            out.writelines(f"m{k // n:06d},t{k % n:05d}\n" for k in part.tolist())
    start = time.process_time()
    catalogue = read_catalogue(tmp_path)
    seconds = time.process_time() - start
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    with capsys.disabled():
        print(f"\nread {rows:,} attestations in {seconds:.1f} s, peak {peak:,.0f} MiB")
    assert catalogue.attested.nnz == len(keys)
    assert peak < 1_500
