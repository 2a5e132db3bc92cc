"""The look of every document, in one place: colours, type, spacing. HTML, PDF, XLSX and figures read it from here.

Print first: dark ink on white, hairlines for structure, one accent. Marks differ by shape as well as by colour, so that
they hold in grey and for colour-blind readers. Only fonts that are on the reader's machine are named; none is fetched.
"""

from __future__ import annotations

COLOURS = {
    "ink": "#17242b",
    "soft": "#4f5d64",
    "line": "#cfd6d6",
    "wash": "#f3f5f2",
    "paper": "#ffffff",
    "accent": "#1d5c57",
    "accent-wash": "#e4eeec",
    "second": "#9a4a12",
    "caution": "#7a4b00",
    "caution-wash": "#fbf3e2",
}

FONTS = {
    "text": '"Source Serif 4", "Source Serif Pro", Charter, "Bitstream Charter", Cambria, "Noto Serif", Georgia, serif',
    "plain": '"Source Sans 3", "Segoe UI", "Helvetica Neue", Roboto, "Noto Sans", "Liberation Sans", Arial, sans-serif',
    "code": 'ui-monospace, "Cascadia Mono", Menlo, Consolas, "DejaVu Sans Mono", monospace',
}

# Steps of one type scale and one spacing scale, in rem.
SIZES = {"note": 0.78, "table": 0.86, "body": 1.0, "lead": 1.32, "section": 1.45, "title": 2.35}
SPACES = {"1": 0.35, "2": 0.7, "3": 1.2, "4": 2.2, "5": 3.6}


def css_tokens() -> str:
    """The identity as CSS custom properties."""
    lines = [f"--{name}: {value};" for name, value in COLOURS.items()]
    lines += [f"--font-{name}: {value};" for name, value in FONTS.items()]
    lines += [f"--size-{name}: {value}rem;" for name, value in SIZES.items()]
    lines += [f"--space-{name}: {value}rem;" for name, value in SPACES.items()]
    return ":root { " + " ".join(lines) + " }"


def ink_on(colour: str) -> str:
    """Black or white, whichever reads better on `colour` (#rrggbb); WCAG 2 relative luminance."""
    return COLOURS["ink"] if luminance(colour) > 0.3 else COLOURS["paper"]


def luminance(colour: str) -> float:
    """Relative luminance of #rrggbb, 0..1 (WCAG 2)."""
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]
