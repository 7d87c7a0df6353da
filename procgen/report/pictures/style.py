"""Colours and letters of pictures and pages.

The hues are those of Okabe & Ito (2008, Color Universal Design), which readers of any colour vision tell apart: blue
#0072B2 and sky blue #56B4E9 for what is stated, vermillion #D55E00 and orange #E69F00 for what departs, bluish green
#009E73 for what agrees; where a word is set in one of them it is darkened or lightened until it can be read. What is
seen is set in ink, and no meaning hangs on a hue alone.
"""

from __future__ import annotations

LIGHT = {
    "ink": "#1d2730",
    "soft": "#56646f",
    "paper": "#fbfaf6",
    "card": "#ffffff",
    "line": "#dcd8cf",
    "grid": "#ebe8e0",
    "stated": "#0072b2",
    "path": "#7d8891",
    "good": "#00664a",
    "bad": "#a34700",
    "open": "#6b5a14",
    "alarm": "#d55e00",
}
DARK = {
    "ink": "#e6e8e5",
    "soft": "#a3b0b9",
    "paper": "#14181b",
    "card": "#1c2226",
    "line": "#39434a",
    "grid": "#293136",
    "stated": "#56b4e9",
    "path": "#8b969e",
    "good": "#5fd3b0",
    "bad": "#f2a65a",
    "open": "#e0c96c",
    "alarm": "#e69f00",
}
SANS = 'system-ui, -apple-system, "Segoe UI", Roboto, "Helvetica Neue", Arial, "Noto Sans", sans-serif'
SERIF = '"Iowan Old Style", "Palatino Linotype", Palatino, "Book Antiqua", Georgia, serif'

# Lengths inside a figure are tenths of its units, so that coordinates need no decimals.
FIGURE = """
.fig { display: block; width: 100%; height: auto; }
.fig text { font: 118px SANS; fill: var(--soft); font-variant-numeric: tabular-nums; }
.fig .key { fill: var(--ink); }
.fig .note { fill: var(--ink); paint-order: stroke; stroke: var(--card); stroke-width: 30px; stroke-linejoin: round; }
.fig .frame { fill: none; stroke: var(--soft); stroke-width: 8px; }
.fig .grid { fill: none; stroke: var(--grid); stroke-width: 8px; }
.fig .line { fill: none; stroke-linejoin: round; stroke-linecap: round; }
.fig .line.stated { stroke: var(--stated); stroke-width: 19px; }
.fig .line.seen { stroke: var(--ink); stroke-width: 15px; }
.fig .line.path { stroke: var(--path); stroke-width: 8px; }
.fig .line.compare { stroke: var(--stated); stroke-width: 15px; stroke-dasharray: 60 40; }
.fig .edge.stated { stroke: var(--stated); stroke-width: 10px; fill: none; }
.fig .area.stated { fill: var(--stated); fill-opacity: .16; }
.fig .area.core { fill-opacity: .2; }
.fig .area.chance { fill: var(--ink); fill-opacity: .13; }
.fig .edge.chance { stroke: none; }
.fig .dot.stated { fill: var(--stated); }
.fig .dot.seen { fill: var(--ink); }
.fig .stem { fill: none; stroke: var(--ink); stroke-width: 26px; }
.fig .whisker { fill: none; stroke: var(--ink); stroke-width: 9px; }
.fig .cell.seen { fill: var(--ink); fill-opacity: .34; }
.fig .cell.stated { fill: var(--stated); fill-opacity: .5; }
@media (max-width: 600px) { .phone .fig text { font-size: 146px; } }
""".replace("SANS", SANS)


def variables(selector: str) -> str:
    """The colours as custom properties, light, and dark where the reader's system is."""
    light, dark = ("; ".join(f"--{name}: {value}" for name, value in each.items()) for each in (LIGHT, DARK))
    return (
        f"{selector} {{ color-scheme: light dark; {light}; }}\n"
        f"@media screen and (prefers-color-scheme: dark) {{ {selector} {{ {dark}; }} }}\n"
    )
