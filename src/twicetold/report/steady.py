"""The same picture, the same bytes: the converter numbers and orders a few things by chance."""

from __future__ import annotations

import re

_SVG_ID = re.compile(r'(?<=\bid=")([A-Za-z]+)\d+(?=")')
#: A dictionary of a PDF that maps names to objects, one a line (fonts, pictures, states).
_PDF_NAMES = re.compile(rb"(?<=<<\n)((?: +/[A-Za-z]+\d+ \d+ 0 R\n){2,})(?= *>>)")
_OBJECT = re.compile(rb"(\d+) 0 obj")
_REFERENCE = re.compile(rb"(?<!\d)(\d+) 0 R(?![A-Za-z])")
_XREF_LINE = re.compile(rb"(\d{10}) 00000 n")
_STARTXREF = re.compile(rb"startxref\s+(\d+)\s+%%EOF\s*$")


def steady_svg(text: str) -> str:
    """Number the ids of an SVG from 1 in the order they are made.

    The converter counts on from one picture to the next, so that a picture's ids depend on what
    was drawn before it.
    """
    made: dict[str, str] = {}
    counts: dict[str, int] = {}
    for found in _SVG_ID.finditer(text):
        if found.group() not in made:
            kind = found.group(1)
            counts[kind] = counts.get(kind, 0) + 1
            made[found.group()] = f"{kind}{counts[kind]}"
    if not made:
        return text
    names = "|".join(sorted(map(re.escape, made), key=len, reverse=True))
    uses = re.compile(rf'((?:\bid="|url\(#|href="#))({names})(?=["\)])')
    return uses.sub(lambda m: m.group(1) + made[m.group(2)], text)


def steady_pdf(raw: bytes) -> bytes:
    """Put the objects of a PDF in the order in which they are referred to, and number them so.

    The converter writes fonts and the names of pictures in the order of a hash table, which
    differs from run to run. A file of another make than the converter's is given back as it is.
    """
    at = raw.rfind(b"\nxref\n")
    trailer = raw.rfind(b"trailer\n")
    start = _STARTXREF.search(raw, max(trailer, 0))
    if not 0 < at < trailer or start is None or int(start.group(1)) != at + 1:
        return raw
    offsets = [int(m.group(1)) for m in _XREF_LINE.finditer(raw, at, trailer)]
    starts = sorted(offsets)
    ends = dict(zip(starts, [*starts[1:], at + 1], strict=True))
    bodies = {}
    for offset in offsets:
        found = _OBJECT.match(raw, offset)
        if found is None:
            return raw
        bodies[int(found.group(1))] = _in_order(raw[found.end() : ends[offset]])
    tail = raw[trailer : start.start()]
    numbers = _numbered(tail, bodies)
    return _written(raw[: starts[0]], numbers, bodies, tail)


def _in_order(body: bytes) -> bytes:
    head, stream, rest = body.partition(b"stream\n")
    head = _PDF_NAMES.sub(lambda m: b"".join(sorted(m.group(1).splitlines(keepends=True))), head)
    return head + stream + rest


def _numbered(tail: bytes, bodies: dict[int, bytes]) -> dict[int, int]:
    """New number of each object: as met when walking down from the trailer."""
    numbers: dict[int, int] = {}
    waiting = [int(m.group(1)) for m in reversed(list(_REFERENCE.finditer(tail)))]
    while waiting:
        old = waiting.pop()
        if old in numbers or old not in bodies:
            continue
        numbers[old] = len(numbers) + 1
        head = bodies[old].partition(b"stream\n")[0]
        waiting += [int(m.group(1)) for m in reversed(list(_REFERENCE.finditer(head)))]
    return numbers


def _written(
    header: bytes, numbers: dict[int, int], bodies: dict[int, bytes], tail: bytes
) -> bytes:
    def renamed(text: bytes) -> bytes:
        return _REFERENCE.sub(lambda m: b"%d 0 R" % numbers.get(int(m.group(1)), 0), text)

    out = [header]
    size = len(header)
    table = [b"xref\n0 %d\n0000000000 65535 f\r\n" % (len(numbers) + 1)]
    for old, new in numbers.items():
        head, stream, rest = bodies[old].partition(b"stream\n")
        text = b"%d 0 obj" % new + renamed(head) + stream + rest
        table.append(b"%010d 00000 n\r\n" % size)
        out.append(text)
        size += len(text)
    tail = re.sub(rb"/Size \d+", b"/Size %d" % (len(numbers) + 1), renamed(tail))
    return b"".join([*out, *table, tail, b"startxref\n%d\n%%%%EOF" % size])
