"""Figures of the deposit: the same bytes every time, and files that other programs can read."""

from __future__ import annotations

import re
import shutil
import subprocess
import xml.etree.ElementTree as ET

import pytest

import deposits
from twicetold.report.figures import render
from twicetold.report.steady import steady_pdf, steady_svg

#: Two weights of type, points of several shapes and a clipped layer: what used to vary.
SPEC = {
    "$schema": "https://vega.github.io/schema/vega-lite/v5.json",
    "title": {"text": "Bold title", "subtitle": "plain subtitle"},
    "data": {"values": [{"x": k % 7, "y": k * k % 11, "k": "abc"[k % 3]} for k in range(60)]},
    "mark": {"type": "point", "clip": True, "opacity": 0.5},
    "encoding": {
        "x": {"field": "x", "type": "quantitative"},
        "y": {"field": "y", "type": "quantitative"},
        "shape": {"field": "k", "type": "nominal"},
        "color": {"field": "k", "type": "nominal"},
    },
}


@pytest.mark.parametrize("kind", ["svg", "pdf"])
def test_drawing_again_gives_the_same_bytes(kind):
    first = render(SPEC, kind)
    render({**SPEC, "mark": {"type": "bar", "clip": True}}, kind)
    assert all(render(SPEC, kind) == first for _ in range(4))


def test_every_offset_of_a_pdf_is_true_and_nothing_is_lost():
    raw = render(SPEC, "pdf")
    start = int(re.search(rb"startxref\s+(\d+)", raw).group(1))
    assert raw[start : start + 5] == b"xref\n"
    offsets = [int(m.group(1)) for m in re.finditer(rb"(\d{10}) 00000 n", raw[start:])]
    for number, offset in enumerate(offsets, 1):
        assert raw[offset:].startswith(b"%d 0 obj" % number)
    assert int(re.search(rb"/Size (\d+)", raw[start:]).group(1)) == len(offsets) + 1
    referred = {int(m.group(1)) for m in re.finditer(rb"(?<!\d)(\d+) 0 R(?![A-Za-z])", raw)}
    assert max(referred) <= len(offsets)
    assert 0 not in referred
    assert steady_pdf(raw) == raw


def test_a_pdf_of_another_make_is_left_alone():
    for raw in (b"", b"%PDF-1.5 nothing of ours", b"\nxref\ntrailer\nstartxref\n7\n%%EOF"):
        assert steady_pdf(raw) == raw


def test_ids_of_an_svg_are_numbered_from_one_and_all_uses_follow():
    text = (
        '<svg><g id="clip18"/><g clip-path="url(#clip18)"/><g id="clip20"/><text>id clip18</text>'
        '<use href="#clip20"/></svg>'
    )
    assert steady_svg(text) == (
        '<svg><g id="clip1"/><g clip-path="url(#clip1)"/><g id="clip2"/><text>id clip18</text>'
        '<use href="#clip2"/></svg>'
    )


@pytest.mark.browser  # may not be skipped in CI
def test_latex_can_take_the_figures_in(tmp_path):
    if shutil.which("pdflatex") is None:
        pytest.skip("pdflatex is not on this machine")
    shutil.copytree(deposits.deposit() / "figures", tmp_path / "figures")
    names = sorted(p.stem for p in (tmp_path / "figures").glob("*.pdf"))
    assert {"map", "clusters_against_holders"} <= set(names)
    pictures = "\n".join(rf"\includegraphics[width=5cm]{{figures/{n}.pdf}}" for n in names)
    head = r"\documentclass{article}\usepackage{graphicx}\begin{document}"
    (tmp_path / "all.tex").write_text(f"{head}{pictures}\\end{{document}}")
    done = subprocess.run(
        ["pdflatex", "-interaction=nonstopmode", "-halt-on-error", "all.tex"],
        cwd=tmp_path,
        capture_output=True,
        check=False,
        timeout=60,
    )
    assert done.returncode == 0, done.stdout[-500:]


def test_every_svg_of_the_deposit_is_well_formed():
    for path in (deposits.deposit() / "figures").glob("*.svg"):
        assert ET.fromstring(path.read_bytes()).tag.endswith("svg")
