"""The design sheet as one page in HTML that needs nothing else: its schematic is inline SVG, its texts are escaped."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from html import escape

from optisize.show.schematic_shapes import Point, Schematic
from optisize.show.sheet import MISSED, Sheet, Table

STROKE, WIRE, DOT = 1.0, 0.75, 1.35  # widths of lines and radius of dots, in points of the schematic
MARGIN = 4.0  # points around the schematic
SCREEN = 1.45  # pixels for a point of the schematic, at the least

STYLE = """
:root { color-scheme: light dark; --ink: #16191d; --soft: #585f68; --line: #c9ced4; --paper: #ffffff; --tint: #f3f5f7; }
@media (prefers-color-scheme: dark) {
  :root { --ink: #e6e8ea; --soft: #a3abb4; --line: #434a52; --paper: #15181b; --tint: #1e2327; }
}
* { box-sizing: border-box; }
body { margin: 0; background: var(--paper); color: var(--ink); font: 14px/1.4 system-ui, sans-serif; }
main { max-width: 1500px; margin: 0 auto; padding: 20px 24px 32px; }
h1 { font-size: 22px; margin: 0; overflow-wrap: anywhere; }
h2 { font-size: 14px; margin: 0 0 4px; }
.design { margin: 2px 0 14px; color: var(--soft); overflow-wrap: anywhere; }
.top { display: grid; grid-template-columns: minmax(280px, 1fr) minmax(320px, 1.2fr); gap: 12px 40px; }
dl { display: grid; grid-template-columns: max-content 1fr; gap: 2px 14px; margin: 0; align-content: start; }
dt { color: var(--soft); }
dd { margin: 0; overflow-wrap: anywhere; }
figure { margin: 18px 0; }
.drawing { overflow-x: auto; border: 1px solid var(--line); padding: 8px; }
svg { display: block; margin: 0 auto; width: 100%; height: auto; }
svg .s { fill: none; stroke: currentColor; stroke-width: 1; stroke-linejoin: round; stroke-linecap: round; }
svg .w { fill: none; stroke: currentColor; stroke-width: .75; stroke-linecap: square; }
svg .f { fill: currentColor; stroke: none; }
svg text { fill: currentColor; font-family: Arial, Helvetica, "Liberation Sans", sans-serif; white-space: pre; }
svg .b { font-weight: bold; }
svg .m { fill: var(--soft); }
figcaption, .note { color: var(--soft); font-size: 12px; margin: 4px 0 0; }
.tables { columns: 2 min(460px, 100%); column-gap: 40px; }
.tables section { break-inside: avoid; margin: 0 0 18px; overflow-x: auto; }
.wide { overflow-x: auto; margin: 0 0 18px; }
table { border-collapse: collapse; font-size: 13px; font-variant-numeric: tabular-nums; width: 100%; }
th, td { padding: 1px 8px 1px 0; text-align: right; vertical-align: top; white-space: nowrap; }
th { color: var(--soft); font-weight: normal; border-bottom: 1px solid var(--line); }
tbody tr:nth-child(even) { background: var(--tint); }
.l { text-align: left; white-space: normal; }
.missed { font-weight: bold; }
code { font: 12px/1.4 ui-monospace, monospace; overflow-wrap: anywhere; }
footer { border-top: 1px solid var(--line); padding-top: 10px; margin-top: 8px; }
.caution { font-weight: bold; margin: 10px 0 0; }
@media (max-width: 760px) { .top { grid-template-columns: 1fr; } }
@page { size: A4 landscape; margin: 10mm; }
@media print {
  :root { color-scheme: light; --ink: #000; --soft: #444; --line: #999; --paper: #fff; --tint: #fff; }
  body { font-size: 8pt; line-height: 1.25; }
  main { max-width: none; padding: 0; }
  h1 { font-size: 14pt; } h2 { font-size: 8pt; margin: 0; } .design { margin-bottom: 3mm; }
  table { font-size: 7.5pt; line-height: 1.2; } th, td { padding: 0 6px 0 0; }
  figcaption, .note { font-size: 7pt; margin: 0; } code { font-size: 6.5pt; }
  .top { grid-template-columns: 1fr 1.2fr; }
  figure { margin: 3mm 0 0; break-after: page; } .drawing { border: none; padding: 0; overflow: visible; }
  svg { max-height: 118mm; min-width: 0 !important; }
  .tables { columns: 2; } .tables section { margin-bottom: 2mm; overflow: visible; }
  .wide { overflow: visible; margin-bottom: 2mm; }
  footer { padding-top: 1mm; margin-top: 1mm; } .caution { margin-top: 1mm; }
}
"""


def sheet_html(sheet: Sheet) -> str:
    """Return the page."""
    wide, others = sheet.tables[0], sheet.tables[1:]
    title = escape(f"{sheet.title}: {sheet.design}")
    return "\n".join(
        [
            "<!doctype html>",
            '<html lang="en">',
            "<head>",
            '<meta charset="utf-8">',
            '<meta name="viewport" content="width=device-width, initial-scale=1">',
            "<meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; style-src 'unsafe-inline'\">",
            f"<title>{title}</title>",
            f"<style>{STYLE}</style>",
            "</head>",
            "<body>",
            "<main>",
            f"<h1>{escape(sheet.title)}</h1>",
            f'<p class="design">Design sheet of {escape(sheet.design)}, {escape(sheet.date)}</p>',
            f'<div class="top">{_list(sheet.facts)}<div>{_table(sheet.results)}</div></div>',
            f'<figure><div class="drawing">{svg(sheet.schematic)}</div>',
            f"<figcaption>{escape(sheet.caption)}</figcaption></figure>",
            f'<div class="wide">{_table(wide)}</div>',
            f'<div class="tables">{"".join(f"<section>{_table(t)}</section>" for t in others)}</div>',
            f'<footer>{_list(sheet.origins, code=True)}<p class="caution">{escape(sheet.caution)}</p></footer>',
            "</main>",
            "</body>",
            "</html>",
            "",
        ]
    )


def _list(pairs: Iterable[tuple[str, str]], code: bool = False) -> str:
    opened, closed = ("<code>", "</code>") if code else ("", "")
    items = (f"<dt>{escape(name)}</dt><dd>{opened}{escape(text)}{closed}</dd>" for name, text in pairs)
    return f"<dl>{''.join(items)}</dl>"


def _table(table: Table) -> str:
    """Return a table with its title and note; a limit that is missed stands out."""

    def cells(tag: str, row: tuple[str, ...]) -> str:
        return "".join(_cell(tag, text, i < table.words) for i, text in enumerate(row))

    rows = "".join(f"<tr>{cells('td', row)}</tr>" for row in table.rows)
    note = f'<p class="note">{escape(table.note)}</p>' if table.note else ""
    head = f"<thead><tr>{cells('th', table.headings)}</tr></thead>"
    return f"<h2>{escape(table.title)}</h2><table>{head}<tbody>{rows}</tbody></table>{note}"


def _cell(tag: str, text: str, words: bool) -> str:
    kinds = ["l"] * words + ["missed"] * (text == MISSED)
    chosen = f' class="{" ".join(kinds)}"' if kinds else ""
    scope = ' scope="col"' if tag == "th" else ""
    return f"<{tag}{scope}{chosen}>{escape(text)}</{tag}>"


def svg(shown: Schematic) -> str:
    """Return a schematic as an SVG element that takes the colour of the text around it."""
    box = shown.box
    width, height = box.right - box.left + 2.0 * MARGIN, box.top - box.bottom + 2.0 * MARGIN
    shift = (MARGIN - box.left, MARGIN + box.top)
    # As large as in print at the least: narrow screens scroll; small stages are not blown up.
    style = f"min-width:{min(SCREEN * width, 1100.0):.0f}px;max-width:{2.0 * width:.0f}px"
    return (
        f'<svg role="img" aria-label="Schematic of the stage" viewBox="0 0 {width:.1f} {height:.1f}" '
        f'style="{style}">{"".join(_shapes(shown, shift))}</svg>'
    )


def _shapes(shown: Schematic, shift: Point) -> Iterator[str]:
    def at(point: Point) -> str:
        return f"{point[0] + shift[0]:.2f} {shift[1] - point[1]:.2f}"

    wires = "".join(f"M{at(w.a)}L{at(w.b)}" for w in shown.wires)
    yield f'<path class="w" d="{wires}"/>'
    for symbol in shown.symbols:
        strokes = "".join(f"M{'L'.join(at(p) for p in line)}" for line in symbol.strokes)
        circles = "".join(_circle("s", centre, radius, shift) for centre, radius in symbol.circles)
        fills = "".join(f'<path class="f" d="M{"L".join(at(p) for p in f)}Z"/>' for f in symbol.fills)
        lines = f'<path class="s" d="{strokes}"/>' if strokes else ""
        yield f"<g><title>{escape(f'{symbol.kind} {symbol.name}')}</title>{lines}{circles}{fills}</g>"
    yield from (_circle("f", dot, DOT, shift) for dot in shown.dots)
    for label in shown.labels:
        anchor = {"left": "start", "right": "end", "centre": "middle"}[label.align]
        for text, (x, y), bold in label.placed():
            kinds = " ".join(["b"] * bold + ["m"] * label.muted)
            yield (
                f'<text x="{x + shift[0]:.2f}" y="{shift[1] - y:.2f}" font-size="{label.size:g}" '
                f'text-anchor="{anchor}"{f" class={kinds!r}" if kinds else ""}>{escape(text)}</text>'
            )


def _circle(kind: str, centre: Point, radius: float, shift: Point) -> str:
    return f'<circle class="{kind}" cx="{centre[0] + shift[0]:.2f}" cy="{shift[1] - centre[1]:.2f}" r="{radius:.2f}"/>'
