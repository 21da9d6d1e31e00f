"""The nine hazard pictograms, drawn for this project.

Geometry after what the standard says in words: a white square set on a point, a red frame, a
black symbol (GHS, annex 3; CLP, annex V, names each symbol). No drawing was copied. Each lives
in a box of 100 by 100; a symbol keeps within 38 of the middle, counted along both axes.
"""

from dataclasses import dataclass

RED = "#d8121e"
_FRAME = (
    f'<path d="M50 4 96 50 50 96 4 50Z" fill="#fff" stroke="{RED}" stroke-width="5.5" '
    'stroke-linejoin="miter"/>'
)


@dataclass(frozen=True)
class Pictogram:
    """`name` is what a reader hears; `symbol` is SVG inside a box of 100 by 100."""

    code: str
    name: str
    symbol: str

    @property
    def svg(self) -> str:
        return (
            '<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 100 100" '
            f'width="100" height="100">{self.inner}</svg>'
        )

    @property
    def inner(self) -> str:
        return _FRAME + self.symbol


_EXPLODING_BOMB = (
    '<circle cx="46" cy="62" r="13"/>'
    '<path d="M36 58 43 54 45 60 52 55 54 62 60 60" fill="none" stroke="#fff" stroke-width="2.4"/>'
    '<path d="M47 47 44 30 50 38 53 21 57 37 66 29 61 42 76 42 64 50 79 57 62 55Z"/>'
    '<path d="M33 46 28 40 35 41ZM38 38 35 29 41 34ZM64 65 73 65 68 69.5ZM60 71 64 77 58 75.5Z"/>'
)
_FLAME = (
    '<path d="M51 17C54 28 69 35 69 50C69 60 62 67 50 67C38 67 31 60 31 50C31 43 34 38 38 34'
    'C38 39 40 42 43 43C41 33 44 24 51 17Z"/>'
    '<path d="M51 42C52 49 59 51 59 58C59 63 55 66 50 66C45 66 41 63 41 58C41 53 43 51 45 49'
    'C46 51 47 52 48 52C48 48 49 45 51 42Z" fill="#fff"/>'
    '<path d="M37 70.5H63V75H37Z"/>'
)
_FLAME_OVER_CIRCLE = (
    '<circle cx="50" cy="63" r="10.5" fill="none" stroke="#000" stroke-width="5.5"/>'
    '<path d="M51 14C53 23 65 29 65 41C65 46 63 49 60 52C58 49 54 47 50 47C46 47 42 49 40 52'
    'C37 49 35 46 35 41C35 35 38 31 41 28C41 32 43 35 45 36C44 27 46 20 51 14Z"/>'
    '<path d="M51 33C52 38 57 39 57 46C55 45 53 44 50 44C47 44 45 45 43 46C43 42 45 40 47 38'
    'C48 40 48 40 49 40C49 37 50 35 51 33Z" fill="#fff"/>'
    '<path d="M43 78.5H57V82H43Z"/>'
)
_GAS_CYLINDER = (
    '<g transform="rotate(-27 50 50) translate(5.5 5.5) scale(0.89)">'
    '<path d="M25 41.5H62C67 41.5 69 45 71 46.5V53.5C69 55 67 58.5 62 58.5H25'
    'C20 58.5 18 55 18 50C18 45 20 41.5 25 41.5Z"/>'
    '<path d="M72.5 46H76V54H72.5ZM77 43.5H82.5V56.5H77Z"/>'
    '<path d="M26 46.5H59" fill="none" stroke="#fff" stroke-width="2.2" stroke-linecap="round"/>'
    "</g>"
)
_TUBE = (
    '<g transform="{place}"><path d="M-13 -4H9C12 -4 13 -2 13 0C13 2 12 4 9 4H-13" fill="#fff" '
    'stroke="#000" stroke-width="2.2"/><path d="M-12 0H9C11 0 12 2 9 3.4H-12Z"/></g>'
)
_DROP = '<path d="M{x} {y}C{x} {y} {left} {low} {left} {base}A2.2 2.2 0 0 0 {right} {base}C{right} {low} {x} {y} {x} {y}Z"/>'  # noqa: E501 - one path


def _drop(x: float, y: float) -> str:
    return _DROP.format(x=x, y=y, left=x - 2.2, right=x + 2.2, low=y + 2.5, base=y + 4)


_CORROSION = (
    _TUBE.format(place="translate(40 29.5) rotate(-35) scale(1.08)")
    + _TUBE.format(place="translate(63.5 40.5) rotate(-35) scale(0.95)")
    + _drop(28.5, 42)
    + _drop(28.5, 50)
    + _drop(55, 50.5)
    # a bar of metal, eaten from above
    + '<path d="M19.5 59H23.5C25 65 33 65 34.5 59H45V67.5H28Z"/>'
    # a hand held out to the left, eaten on its back
    + '<path d="M47.5 65C46.5 62.5 48 61 50 61H51.5C52.5 64.5 58 64.5 59 61.5C62 60.5 64 59 67 58.5'
    "L76.5 58L66 69.5C63 73 61 74 57.5 74H53C50.5 74 50.5 71.5 52.5 71.3L49.5 71"
    'C47 70.5 47 68.5 49 68L48.5 67.5C46.5 67 46.5 65.5 47.5 65Z"/>'
)
_SKULL = (
    '<g transform="translate(4.5 3) scale(0.91)">'
    '<g stroke="#000" stroke-width="5.2" stroke-linecap="round">'
    '<path d="M33 59 67 74M67 59 33 74" fill="none"/></g>'
    '<circle cx="31.5" cy="56.5" r="3.4"/><circle cx="30.5" cy="61.5" r="3.4"/>'
    '<circle cx="68.5" cy="56.5" r="3.4"/><circle cx="69.5" cy="61.5" r="3.4"/>'
    '<circle cx="31.5" cy="72" r="3.2"/><circle cx="34" cy="76.2" r="3.2"/>'
    '<circle cx="68.5" cy="72" r="3.2"/><circle cx="66" cy="76.2" r="3.2"/>'
    '<path d="M50 20C60.5 20 67 27 67 36.5C67 42 65 46 61.5 48.5L60 58C60 60 59 61 57 61H43'
    'C41 61 40 60 40 58L38.5 48.5C35 46 33 42 33 36.5C33 27 39.5 20 50 20Z" stroke="#fff" '
    'stroke-width="2"/>'
    '<ellipse cx="43" cy="39" rx="4.6" ry="5" fill="#fff"/>'
    '<ellipse cx="57" cy="39" rx="4.6" ry="5" fill="#fff"/>'
    '<path d="M50 44 47.3 49.5H52.7Z" fill="#fff"/>'
    '<path d="M45.5 53V61M50 53V61M54.5 53V61" stroke="#fff" stroke-width="1.6"/></g>'
)
_EXCLAMATION = (
    '<path d="M42.5 25C42.5 20 45.5 17.5 50 17.5C54.5 17.5 57.5 20 57.5 25L53.8 58'
    'C53.5 60.5 46.5 60.5 46.2 58Z"/><circle cx="50" cy="71" r="6.3"/>'
)
_HEALTH = (
    '<path d="M50 17C56 17 59.5 21.5 59.5 27.5C59.5 32 57.5 35.5 55.5 37.5V41'
    "C64 43 69 47 69.5 55V68.5H30.5V55C31 47 36 43 44.5 41V37.5C42.5 35.5 40.5 32 40.5 27.5"
    'C40.5 21.5 44 17 50 17Z"/>'
    '<path d="M50 42.5 52.4 50.2 59.5 46.5 55.8 53.6 64.5 56 55.8 58.4 59.5 65.5 52.4 61.8 '
    '50 71 47.6 61.8 40.5 65.5 44.2 58.4 35.5 56 44.2 53.6 40.5 46.5 47.6 50.2Z" fill="#fff"/>'
)
_ENVIRONMENT = (
    '<g transform="translate(2.5 1)">'
    # a bare tree on the bank
    '<path d="M36.5 65 38.5 27H41L44 65Z"/>'
    '<g fill="none" stroke="#000" stroke-linecap="round" stroke-linejoin="round">'
    '<path d="M39.5 47 30 38 29.5 32M30 38 25 37.5M40.5 41 51 31 51.5 24M51 31 57 29" '
    'stroke-width="2.6"/>'
    '<path d="M39.8 30 36 22M40.5 32 44.5 21M41.5 53 50 46" stroke-width="2.2"/></g>'
    '<path d="M23 63.5H51C54 66 55 69 57 71.5H31Z"/>'
    # a fish on its back, mouth to the right
    '<path d="M50 62C55 55 67 54.5 76 60.5C69 67 58 67.5 52.5 63.5L46 67.5L47.5 61.5L46 56.5Z" '
    'stroke="#fff" stroke-width="1.4"/>'
    '<path d="M68 57.6 70.6 60.2M70.6 57.6 68 60.2" stroke="#fff" stroke-width="1.3"/></g>'
)

PICTOGRAMS = {
    code: Pictogram(code, name, symbol)
    for code, name, symbol in (
        ("GHS01", "exploding bomb", _EXPLODING_BOMB),
        ("GHS02", "flame", _FLAME),
        ("GHS03", "flame over circle", _FLAME_OVER_CIRCLE),
        ("GHS04", "gas cylinder", _GAS_CYLINDER),
        ("GHS05", "corrosion", _CORROSION),
        ("GHS06", "skull and crossbones", _SKULL),
        ("GHS07", "exclamation mark", _EXCLAMATION),
        ("GHS08", "health hazard", _HEALTH),
        ("GHS09", "environment", _ENVIRONMENT),
    )
}
