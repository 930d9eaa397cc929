"""Renews the pictures of docs/tuning.md: python -m tests.pictures REPORT.html PREFIX SECTION...

Each section becomes docs/pictures/PREFIX-SECTION.png, its figure as chromium draws it, in few colours.
"""

import struct
import sys
import tempfile
import zlib
from pathlib import Path

import numpy as np

from tests.browser import running_or_skip

PICTURES = Path(__file__).parent.parent / "docs" / "pictures"
COLOURS = 128
WINDOW = {"width": 840, "height": 900}


def draw(report, prefix, sections):
    """Writes a picture of each section."""
    PICTURES.mkdir(exist_ok=True)
    with running_or_skip() as browser, tempfile.TemporaryDirectory() as folder:
        window = browser.new_context(
            viewport=WINDOW, color_scheme="light", reduced_motion="reduce", offline=True
        )
        page = window.new_page()
        page.goto(Path(report).resolve().as_uri())
        page.wait_for_function("document.querySelectorAll('.js-plotly-plot .main-svg').length > 0")
        page.add_style_tag(content="figcaption, figure > p { display: none }")
        for section in sections:
            figure = page.locator(f"#{section} figure").first
            figure.scroll_into_view_if_needed()
            page.wait_for_timeout(500)
            shot = Path(folder) / "shot.png"
            figure.screenshot(path=shot)
            small = written(*few_colours(pixels_of(shot.read_bytes())))
            (PICTURES / f"{prefix}-{section}.png").write_bytes(small)


def pixels_of(png):
    """uint8[height, width, 3] of a PNG with eight bits a channel that is not interlaced."""
    at, data, channels = 8, b"", {2: 3, 6: 4}
    while at < len(png):
        (length,) = struct.unpack(">I", png[at : at + 4])
        kind, content = png[at + 4 : at + 8], png[at + 8 : at + 8 + length]
        if kind == b"IHDR":
            width, height, _, colour = struct.unpack(">IIBB", content[:10])
        elif kind == b"IDAT":
            data += content
        at += 12 + length
    step = channels[colour]
    raw = np.frombuffer(zlib.decompress(data), np.uint8).reshape(height, 1 + step * width)
    rows = np.zeros((height + 1, step * (width + 1)), np.int64)  # a black pixel around
    for y, (kind, *line) in enumerate(raw.tolist(), 1):
        row, above = rows[y].tolist(), rows[y - 1].tolist()
        for x, value in enumerate(line, step):
            left, up, corner = row[x - step], above[x], above[x - step]
            row[x] = (value + (0, left, up, (left + up) // 2, nearest(left, up, corner))[kind]) & 255
        rows[y] = row
    return rows[1:, step:].reshape(height, width, step)[:, :, :3].astype(np.uint8)


def nearest(left, up, corner):
    """Paeth's predictor, https://www.w3.org/TR/png-3/#9Filter-type-4-Paeth."""
    guess = left + up - corner
    return min((abs(guess - left), 0, left), (abs(guess - up), 1, up), (abs(guess - corner), 2, corner))[2]


def few_colours(pixels):
    """The commonest colours, uint8[n, 3], and for each pixel the nearest of them, uint8[height, width]."""
    flat = pixels.reshape(-1, 3).astype(np.int64)
    all_colours, inverse, counts = np.unique(flat, axis=0, return_inverse=True, return_counts=True)
    palette = all_colours[np.argsort(-counts, kind="stable")[:COLOURS]]
    distances = ((all_colours[:, np.newaxis] - palette) ** 2).sum(axis=2)
    places = distances.argmin(axis=1)[inverse.ravel()]
    return palette.astype(np.uint8), places.astype(np.uint8).reshape(pixels.shape[:2])


def written(palette, places):
    """A PNG with a palette."""
    height, width = places.shape
    lines = np.concatenate([np.zeros((height, 1), np.uint8), places], axis=1).tobytes()
    parts = (
        (b"IHDR", struct.pack(">IIBBBBB", width, height, 8, 3, 0, 0, 0)),
        (b"PLTE", palette.tobytes()),
        (b"IDAT", zlib.compress(lines, 9)),
        (b"IEND", b""),
    )
    return b"\x89PNG\r\n\x1a\n" + b"".join(
        struct.pack(">I", len(content)) + kind + content + struct.pack(">I", zlib.crc32(kind + content))
        for kind, content in parts
    )


if __name__ == "__main__":
    draw(sys.argv[1], sys.argv[2], sys.argv[3:])
