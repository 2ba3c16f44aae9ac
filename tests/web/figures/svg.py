"""Reads an SVG figure back: coordinates to data by the tick labels that a reader sees, not by the drawing code."""

import re
from dataclasses import dataclass
from xml.etree import ElementTree as ET

import numpy as np

Floats = np.ndarray[tuple[int, ...], np.dtype[np.float64]]
SVG = "{http://www.w3.org/2000/svg}"
NUMBER = re.compile(r"-?\d+(?:\.\d+)?(?:e[-+]?\d+)?")


def parse(svg: bytes) -> ET.Element:
    """With comments, in which matplotlib says what each outlined text reads."""
    parser = ET.XMLParser(target=ET.TreeBuilder(insert_comments=True))
    return ET.fromstring(svg, parser=parser)


@dataclass(frozen=True)
class Scale:
    """One axis: data = slope * position + origin, or ten to that."""

    slope: float
    origin: float
    logarithmic: bool

    def data(self, position: Floats) -> Floats:
        """Positions to data."""
        value = self.slope * position + self.origin
        return np.asarray(10**value if self.logarithmic else value)


class Drawing:
    """One parsed figure."""

    def __init__(self, svg: bytes) -> None:
        self.root = parse(svg)
        self.parents = {child: parent for parent in self.root.iter() for child in parent}

    def group(self, gid: str) -> ET.Element:
        """The artist with this id."""
        found = [g for g in self.root.iter(f"{SVG}g") if g.get("id") == gid]
        assert len(found) == 1, f"{len(found)} groups {gid}"
        return found[0]

    def has(self, gid: str) -> bool:
        """Whether there is such an artist."""
        return any(g.get("id") == gid for g in self.root.iter(f"{SVG}g"))

    def panel_of(self, gid: str) -> ET.Element:
        """The axes that an artist stands in."""
        element = self.group(gid)
        while not str(element.get("id")).startswith("axes_"):
            element = self.parents[element]
        return element

    def markers(self, gid: str, *, x: str | None = None) -> Floats:
        """Data of the points of an artist: (n, 2). `x`: artist whose panel has the labels of the x axis."""
        uses = list(self.group(gid).iter(f"{SVG}use"))
        at = np.array([[float(u.get("x", "nan")), float(u.get("y", "nan"))] for u in uses]).reshape(-1, 2)
        return self._data(gid, at, x)

    def line(self, gid: str, *, x: str | None = None) -> Floats:
        """Data of the vertices of a line: (n, 2)."""
        path = next(self.group(gid).iter(f"{SVG}path"))
        return self._data(gid, _vertices(str(path.get("d"))), x)

    def band(self, gid: str, *, x: str | None = None) -> Floats:
        """Data of the vertices of a filled band: (n, 2)."""
        group = self.group(gid)
        path, use = next(group.iter(f"{SVG}path")), next(group.iter(f"{SVG}use"))
        offset = np.array([float(use.get("x", "0")), float(use.get("y", "0"))])
        return self._data(gid, _vertices(str(path.get("d"))) + offset, x)

    def shape(self, gid: str) -> str:
        """Outline of an artist's marker."""
        return str(next(self.group(gid).iter(f"{SVG}path")).get("d"))

    def texts(self) -> list[str]:
        """Every text, as its comment says it."""
        return [str(c.text).strip() for c in self.root.iter() if c.tag is ET.Comment]

    def text_sizes(self) -> list[float]:
        """Sizes of all texts in the unit of the view box."""
        scales = re.findall(r"scale\((\d*\.?\d+) -", ET.tostring(self.root, encoding="unicode"))
        return [100 * float(scale) for scale in scales]

    def _data(self, gid: str, at: Floats, x: str | None) -> Floats:
        across, up = self.scale(x or gid, "xtick"), self.scale(gid, "ytick")
        return np.column_stack([across.data(at[:, 0]), up.data(at[:, 1])])

    def scale(self, gid: str, kind: str) -> Scale:
        """From the ticks of the panel and the numbers written beside them."""
        positions, values = [], []
        for tick in self.panel_of(gid).iter(f"{SVG}g"):
            if not str(tick.get("id")).startswith(kind):
                continue
            uses = list(tick.iter(f"{SVG}use"))
            words = [str(c.text).strip().replace("\N{MINUS SIGN}", "-") for c in tick.iter() if c.tag is ET.Comment]
            place = [u for u in uses if u.get("y") is not None and u.get("x") is not None]
            if words and place and NUMBER.fullmatch(words[0]):
                positions.append(float(str(place[0].get("x" if kind == "xtick" else "y"))))
                values.append(float(words[0]))
        assert len(values) >= 2, f"fewer than two {kind} numbers beside {gid}"
        p, v = np.array(positions), np.array(values)
        straight = _fitted(p, v)
        if np.allclose(straight.data(p), v, rtol=1e-3, atol=1e-3 * np.ptp(v)):
            return straight
        log = _fitted(p, np.log10(v))
        return Scale(log.slope, log.origin, logarithmic=True)


def _fitted(position: Floats, value: Floats) -> Scale:
    slope, origin = np.polyfit(position, value, 1)
    return Scale(float(slope), float(origin), logarithmic=False)


def _vertices(d: str) -> Floats:
    numbers = [float(n) for n in NUMBER.findall(d)]
    return np.array(numbers).reshape(-1, 2)
