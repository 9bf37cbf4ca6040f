"""Drawings of the cohort's page as SVG: every sample a dot, groups told by colour and shape."""

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from html import escape

__all__ = ["COLOURS", "Dot", "Line", "legend", "line_chart", "number", "strip_chart"]

# Okabe & Ito 2008, Color Universal Design: told apart with every common colour vision.
COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#8A6D00", "#56B4E9", "#000000")
_SHAPES = ("circle", "square", "triangle", "diamond", "cross", "down", "plus")
_LEFT, _TOP, _BOTTOM = 58.0, 18.0, 34.0
_MINUS = "\N{MINUS SIGN}"
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


@dataclass(frozen=True, slots=True)
class Dot:
    """One sample: value with its interval (NaN where none), and whether it was compared."""

    name: str
    value: float
    low: float
    high: float
    compared: bool


@dataclass(frozen=True, slots=True)
class Line:
    """One polyline of a group; the group's own line is the strong one."""

    name: str
    x: Sequence[float]
    y: Sequence[float]
    group: int
    strong: bool = False


def number(value: float, digits: int = 3) -> str:
    """Return a number for reading: plain between 0.0001 and 100,000, else with a power of ten.

    Parameters
    ----------
    value : float
        Any number; a dash is returned for one that is not finite.
    digits : int
        Significant digits.

    Returns
    -------
    str
        The number, with a true minus sign.

    Examples
    --------
    >>> number(1234.5), number(0.02468), number(4.07e9).encode("ascii", "replace")
    ('1,234', '0.0247', b'4.07 ? 10?')
    """
    if not math.isfinite(value):
        return "\N{EN DASH}"
    if value == 0:
        return "0"
    power = math.floor(math.log10(abs(float(f"{value:.{digits - 1}e}"))))
    if -4 < power < 5:
        return f"{value:,.{max(0, digits - 1 - power)}f}".replace("-", _MINUS)
    mantissa = f"{value / 10.0**power:.{digits - 1}f}".replace("-", _MINUS)
    return f"{mantissa} \N{MULTIPLICATION SIGN} 10{str(power).translate(_SUPERSCRIPT)}"


def strip_chart(
    groups: Sequence[tuple[str, Sequence[Dot]]],
    centres: Sequence[tuple[float, float, float]],
    *,
    title: str,
    unit: str,
    scale: str,
    width: float = 300.0,
    height: float = 190.0,
) -> str:
    """Draw one figure by group: a dot a sample, its interval, the group's mean and its interval.

    Parameters
    ----------
    groups : sequence of (name, dots)
        The groups in their order.
    centres : sequence of (mean, low, high)
        One per group, of the subjects; NaN where there is none.
    title, unit : str
        The figure's words.
    scale : str
        "log" or "linear".
    width, height : float
        Size in pixels.

    Returns
    -------
    str
        An `svg` element; samples that were left out of the comparison are hollow.
    """
    dots = [dot for _, of_group in groups for dot in of_group]
    seen = [*(dot.value for dot in dots), *(v for centre in centres for v in centre)]
    axis = _Axis.of(seen, scale, height, reaching=[v for dot in dots for v in (dot.low, dot.high)])
    step = (width - _LEFT - 8) / max(1, len(groups))
    parts = [*axis.drawn(width, unit)]
    for k, (name, of_group) in enumerate(groups):
        middle = _LEFT + step * (k + 0.5)
        parts += _strip(of_group, middle, step * 0.3, axis.place, k)
        parts += _centre(centres[k], middle + step * 0.36, axis.place)
        words = _shortened(name, step)
        parts.append(_text(middle, height - 16, words, "middle", "name"))
        parts.append(_text(middle, height - 3, f"n = {len(of_group)}", "middle", "tick"))
    return _svg(width, height, title, parts)


def _shortened(name: str, room: float) -> str:
    most = max(3, int(room / 6.5))
    return name if len(name) <= most else name[: most - 1] + "…"


def _strip(
    dots: Sequence[Dot], middle: float, half_width: float, place: Callable[[float], float], k: int
) -> Iterator[str]:
    """Draw dots side by side where they would cover one another."""
    taken: list[tuple[float, float]] = []
    for dot in sorted(dots, key=lambda d: (d.value, d.name)):
        y = place(dot.value)
        offset = _free_offset(taken, y, half_width)
        taken.append((offset, y))
        x = middle + offset
        words = f"{dot.name}: {number(dot.value, 4)}"
        if math.isfinite(dot.low) and math.isfinite(dot.high):
            words += f" ({number(dot.low, 4)} to {number(dot.high, 4)})"
            y_low, y_high = place(dot.low), place(dot.high)
            yield f'<path class="whisker" d="M{x:.1f} {y_low:.1f}V{y_high:.1f}"/>'
        if not dot.compared:
            words += ", not compared"
        yield _mark(x, y, k, escape(words), hollow=not dot.compared)


def _free_offset(taken: list[tuple[float, float]], y: float, half_width: float) -> float:
    """Return the offset nearest to the middle where a dot touches no other."""
    offsets = [0.0] + [side * 7.0 * k for k in range(1, 40) for side in (1, -1)]
    for offset in offsets:
        if abs(offset) > half_width:
            break
        if all((offset - x) ** 2 + (y - other) ** 2 > 42 for x, other in taken):
            return offset
    return 0.0


def _mark(x: float, y: float, k: int, words: str, *, hollow: bool = False) -> str:
    """Draw a group's mark; the words show on hover and are read aloud."""
    colour, shape = COLOURS[k % len(COLOURS)], _SHAPES[k % len(_SHAPES)]
    outline = {
        "circle": "M-3.4 0a3.4 3.4 0 1 0 6.8 0a3.4 3.4 0 1 0 -6.8 0z",
        "square": "M-3 -3h6v6h-6z",
        "triangle": "M0 -4l3.8 6.6h-7.6z",
        "diamond": "M0 -4.2l4.2 4.2l-4.2 4.2l-4.2 -4.2z",
        "cross": "M-3.5 -2l1.5 -1.5l2 2l2 -2l1.5 1.5l-2 2l2 2l-1.5 1.5l-2 -2l-2 2l-1.5 -1.5l2 -2z",
        "down": "M0 4l3.8 -6.6h-7.6z",
        "plus": "M-1 -4h2v3h3v2h-3v3h-2v-3h-3v-2h3z",
    }[shape]
    fill = "#fff" if hollow else colour
    return (
        f'<path class="mark" d="{outline}" transform="translate({x:.1f} {y:.1f})" fill="{fill}" '
        f'stroke="{colour}"><title>{words}</title></path>'
    )


def _centre(
    centre: tuple[float, float, float], x: float, place: Callable[[float], float]
) -> Iterator[str]:
    mean, low, high = centre
    if not math.isfinite(mean):
        return
    if math.isfinite(low) and math.isfinite(high):
        yield f'<path class="centre" d="M{x:.1f} {place(low):.1f}V{place(high):.1f}"/>'
    yield f'<path class="centre" d="M{x - 6:.1f} {place(mean):.1f}h12"/>'


def line_chart(
    lines: Sequence[Line],
    *,
    title: str,
    unit: str,
    scale: str,
    x_label: str,
    width: float = 300.0,
    height: float = 220.0,
) -> str:
    """Draw lines over whole numbers: thin for samples, strong with marks for groups.

    Parameters
    ----------
    lines : sequence of Line
        Values that are not finite, or not positive on a log scale, are left out.
    title, unit : str
        The words.
    scale : str
        "log" or "linear".
    x_label : str
        The words below.
    width, height : float
        Size in pixels.

    Returns
    -------
    str
        An `svg` element.
    """
    values = [v for line in lines for v in line.y]
    axis = _Axis.of(values, scale, height)
    most = max([1.0, *(v for line in lines for v in line.x)])
    parts = [*axis.drawn(width, unit)]

    def across(x: float) -> float:
        return _LEFT + 14 + (width - _LEFT - 30) * (x - 1) / max(1.0, most - 1)

    parts += [
        _text(across(k), height - 18, str(k), "middle", "tick")
        for k in range(1, int(most) + 1, 1 if most < 16 else 2)
    ]
    parts.append(_text(_LEFT + (width - _LEFT) / 2, height - 3, x_label, "middle", "tick"))
    for line in sorted(lines, key=lambda one: one.strong):
        parts += _drawn_line(line, across, axis)
    return _svg(width, height, title, parts)


def _drawn_line(line: Line, across: Callable[[float], float], axis: "_Axis") -> Iterator[str]:
    points = [
        (across(x), axis.place(y)) for x, y in zip(line.x, line.y, strict=True) if axis.shows(y)
    ]
    if not points:
        return
    colour = COLOURS[line.group % len(COLOURS)]
    path = "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in points)
    kind = "strong" if line.strong else "thin"
    words = f"<title>{escape(line.name)}</title>"
    yield f'<path class="{kind}" d="{path}" stroke="{colour}">{words}</path>'
    if line.strong or len(points) == 1:
        yield from (_mark(x, y, line.group, escape(line.name)) for x, y in points)


def legend(names: Sequence[str]) -> str:
    """Draw the groups' marks with their names.

    Parameters
    ----------
    names : sequence of str
        The groups in their order.

    Returns
    -------
    str
        One `span` with an `svg` a group.
    """
    return "".join(
        f'<span class="key"><svg width="14" height="14" aria-hidden="true">'
        f"{_mark(7, 7, k, '')}</svg> {escape(name)}</span>"
        for k, name in enumerate(names)
    )


@dataclass(frozen=True, slots=True)
class _Axis:
    """The upright axis: from values to pixels, linear or logarithmic."""

    low: float
    high: float
    scale: str
    height: float

    @classmethod
    def of(
        cls, values: Sequence[float], scale: str, height: float, *, reaching: Sequence[float] = ()
    ) -> "_Axis":
        """Span the values, and what reaches beyond them by no more than their own range."""
        shown, beyond = (
            [math.log10(v) if scale == "log" else v for v in some if _can_show(v, scale)]
            for some in (values, reaching)
        )
        if not shown:
            return cls(1.0 if scale == "log" else 0.0, 10.0, scale, height)
        low, high = min(shown), max(shown)
        room = (high - low) or math.inf
        low, high = (
            min([low, *(max(v, low - room) for v in beyond)]),
            max([high, *(min(v, high + room) for v in beyond)]),
        )
        margin = 0.06 * (high - low) or 0.05 * abs(high) or 0.5
        low, high = low - margin, high + margin
        if scale == "log":
            low, high = 10.0**low, 10.0**high
        return cls(low, high, scale, height)

    def shows(self, value: float) -> bool:
        return _can_show(value, self.scale)

    def place(self, value: float) -> float:
        low, high = self.low, self.high
        if self.scale == "log":
            value, low, high = (math.log10(max(v, 1e-300)) for v in (value, low, high))
        share = min(1.0, max(0.0, (value - low) / (high - low)))
        return self.height - _BOTTOM - share * (self.height - _BOTTOM - _TOP)

    def drawn(self, width: float, unit: str) -> Iterator[str]:
        for tick in _ticks(self.low, self.high, self.scale):
            y = self.place(tick)
            yield f'<path class="grid" d="M{_LEFT:.1f} {y:.1f}H{width - 4:.1f}"/>'
            yield _text(_LEFT - 5, y + 3.5, _tick_words(tick), "end", "tick")
        if unit:
            yield _text(2, 10, unit, "start", "tick")


def _can_show(value: float, scale: str) -> bool:
    return math.isfinite(value) and (scale != "log" or value > 0)


def _tick_words(tick: float) -> str:
    """Return a round value without idle zeros."""
    mantissa, times, power = number(tick).partition(" ")
    if "." in mantissa:
        mantissa = mantissa.rstrip("0").rstrip(".")
    return f"{mantissa}{times}{power}"


def _ticks(low: float, high: float, scale: str) -> list[float]:
    """Return three to seven round values inside the range."""
    if scale == "log" and high / low > 5:
        powers = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
        for heads in ((1,), (1, 3), (1, 2, 5)):
            ticks = [h * 10.0**p for p in powers for h in heads if low <= h * 10.0**p <= high]
            if len(ticks) >= 3:
                return ticks[:: math.ceil(len(ticks) / 7)]
    raw = (high - low) / 5
    power = 10.0 ** math.floor(math.log10(raw))
    step = next(s * power for s in (1, 2, 2.5, 5, 10) if s * power >= raw)
    return [k * step for k in range(math.ceil(low / step), math.floor(high / step) + 1)]


def _text(x: float, y: float, words: str, anchor: str, kind: str) -> str:
    place = f'x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}" class="{kind}"'
    return f"<text {place}>{escape(words)}</text>"


def _svg(width: float, height: float, title: str, parts: Sequence[str]) -> str:
    return (
        f'<svg viewBox="0 0 {width:g} {height:g}" width="{width:g}" height="{height:g}" role="img" '
        f'aria-label="{escape(title, quote=True)}">{"".join(parts)}</svg>'
    )
