"""Reads printed codes again by independent libraries, for tests/e2e_labels.rs.

    read_codes.py FILE… [--damage]

Each page of a PDF and each SVG is drawn at 300 dots an inch and read. Prints
one JSON object: `codes` (text and symbology of each, from top to bottom) and
`pages` (width and height in mm, and the lengths of long thin lines in mm).
With --damage, dirt is drawn across every page before it is read.
"""

import io
import json
import sys

import pypdfium2
import resvg_py
import zxingcpp
from PIL import Image, ImageDraw

DPI = 300
MM = 25.4


def drawn(path):
    if path.endswith(".pdf"):
        return [page.render(scale=DPI / 72).to_pil().convert("L") for page in pypdfium2.PdfDocument(path)]
    text = open(path, encoding="utf-8").read()
    png = resvg_py.svg_to_bytes(svg_string=text, dpi=DPI)
    return [Image.open(io.BytesIO(bytes(png))).convert("L")]


def damaged(image):
    pen = ImageDraw.Draw(image)
    for x in range(0, image.width, 40):
        pen.rectangle([x, 0, x + 16, image.height], fill=0)
    for y in range(0, image.height, 40):
        pen.rectangle([0, y, image.width, y + 12], fill=0)
    return image


def longest_line(image):
    """Length of the longest unbroken dark line near the foot, in mm."""
    best = 0
    for y in range(image.height - int(15 / MM * DPI), image.height):
        row, run = image.crop((0, y, image.width, y + 1)).tobytes(), 0
        for value in row:
            run = run + 1 if value < 128 else 0
            best = max(best, run)
    return best / DPI * MM


def main():
    files = [a for a in sys.argv[1:] if not a.startswith("--")]
    codes, pages = [], []
    for image in (image for path in files for image in drawn(path)):
        if "--damage" in sys.argv:
            image = damaged(image)
        pages.append([image.width / DPI * MM, image.height / DPI * MM, longest_line(image)])
        found = zxingcpp.read_barcodes(image)
        found.sort(key=lambda b: (b.position.top_left.y // 40, b.position.top_left.x))
        codes += [{"text": b.text, "as": b.format.name, "identifier": b.symbology_identifier} for b in found]
    print(json.dumps({"codes": codes, "pages": pages}))


main()
