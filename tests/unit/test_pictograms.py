"""The nine pictograms: all there, framed in red, the symbol black and inside the frame."""

import re
from math import cos, radians, sin
from xml.etree import ElementTree as ET

import pytest

from labplan import datafiles
from labplan.procedures.sheet.pictograms import PICTOGRAMS, RED

CODES = [f"GHS0{number}" for number in range(1, 10)]


def test_there_is_one_for_every_code_and_for_all_that_the_data_name() -> None:
    assert sorted(PICTOGRAMS) == CODES
    rows = datafiles.table("classifications")["classifications"]
    used = {code for row in rows for code in row["pictograms"]}
    assert used
    assert used <= set(PICTOGRAMS)
    assert len({pictogram.symbol for pictogram in PICTOGRAMS.values()}) == 9
    assert len({pictogram.name for pictogram in PICTOGRAMS.values()}) == 9


@pytest.mark.parametrize("code", CODES)
def test_a_white_square_on_its_point_with_a_red_frame_and_a_black_symbol(code: str) -> None:
    root = ET.fromstring(PICTOGRAMS[code].svg)
    frame = root[0]
    assert (frame.get("fill"), frame.get("stroke")) == ("#fff", RED)
    corners = [tuple(map(float, pair)) for pair in
               re.findall(r"(\d+) (\d+)", frame.get("d", ""))]  # fmt: skip
    assert corners == [(50, 4), (96, 50), (50, 96), (4, 50)]
    inside = [e for e in root.iter() if e is not root and e is not frame]
    colours = {e.get(name) for e in inside for name in ("fill", "stroke")} - {None}
    assert colours <= {"#fff", "#000", "none"}
    assert RED not in PICTOGRAMS[code].symbol


@pytest.mark.parametrize("code", CODES)
def test_the_symbol_does_not_touch_the_frame(code: str) -> None:
    """Every corner and circle of a symbol, its groups' shifts counted, lies within the square.

    The inner edge of the frame is where |x - 50| + |y - 50| = 46 - 5.5 / sqrt(2).
    """
    inner_edge = 46 - 5.5 / 2**0.5
    reach = max(abs(x - 50) + abs(y - 50) for x, y in _points(PICTOGRAMS[code].svg))
    assert reach < inner_edge


def _points(svg: str) -> list[tuple[float, float]]:
    def walk(element: ET.Element, move: list[tuple[str, list[float]]]) -> None:
        here = [*move, *_transforms(element.get("transform", ""))]
        for x, y in _own_points(element):
            found.append(_moved(x, y, here))
        for child in element:
            walk(child, here)

    found: list[tuple[float, float]] = []
    root = ET.fromstring(svg)
    for child in list(root)[1:]:
        walk(child, [])
    assert found
    return found


def _transforms(text: str) -> list[tuple[str, list[float]]]:
    return [
        (name, [float(n) for n in re.findall(r"-?[\d.]+", values)])
        for name, values in re.findall(r"(\w+)\(([^)]*)\)", text)
    ]


def _moved(x: float, y: float, moves: list[tuple[str, list[float]]]) -> tuple[float, float]:
    for name, values in reversed(moves):
        if name == "translate":
            x, y = x + values[0], y + values[1]
        elif name == "scale":
            x, y = x * values[0], y * values[0]
        else:
            angle = radians(values[0])
            cx, cy = values[1:] if len(values) == 3 else (0.0, 0.0)
            dx, dy = x - cx, y - cy
            x = cx + dx * cos(angle) - dy * sin(angle)
            y = cy + dx * sin(angle) + dy * cos(angle)
    return x, y


def _own_points(element: ET.Element) -> list[tuple[float, float]]:
    if element.tag.endswith(("circle", "ellipse")):
        cx, cy = float(element.get("cx", 0)), float(element.get("cy", 0))
        rx = float(element.get("rx") or element.get("r") or 0)
        ry = float(element.get("ry") or element.get("r") or 0)
        step = rx / 2**0.5, ry / 2**0.5
        return [(cx + a * step[0], cy + b * step[1]) for a in (-1, 1) for b in (-1, 1)]
    return _path_points(element.get("d", ""))


def _path_points(path: str) -> list[tuple[float, float]]:
    """The end points of the segments of an absolute path."""
    points, x, y = [], 0.0, 0.0
    for command, text in re.findall(r"([MLHVCAZ])([^MLHVCAZ]*)", path):
        numbers = [float(n) for n in re.findall(r"-?\d*\.?\d+", text)]
        size = {"M": 2, "L": 2, "H": 1, "V": 1, "C": 6, "A": 7, "Z": 0}[command]
        for start in range(0, len(numbers), size or 1):
            chunk = numbers[start : start + size]
            if command == "H":
                x = chunk[0]
            elif command == "V":
                y = chunk[0]
            else:
                x, y = chunk[-2:]
            points.append((x, y))
    return points
