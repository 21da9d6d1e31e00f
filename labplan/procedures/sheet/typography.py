"""Set the document's plain text as a chemist writes it: β, subscripts, charges, italic locants.

The stored document stays as it is; this is for reading. Only a list of known formulas is set
with subscripts inside a sentence, because H226, C-2 and a bottle's code look much the same.
"""

import re

# style, text: "", "sub", "sup", "i" (italic), "small" (a small capital), "code" (never broken)
Run = tuple[str, str]


class Rich(list[Run]):
    """Text with styles. `plain` is what a title, an alt text or a search sees."""

    @property
    def plain(self) -> str:
        return "".join(text for _, text in self)


NO_BREAK = "\N{NO-BREAK SPACE}"
_UNIT = r"(?:mL|L|mg|g|mmol|mol|µm|mm|cm|mbar|°C|K|h|min|%|equiv|Da|Hz|ppm|M)"
_PLAIN_CHANGES = (
    (re.compile(r"(?<![A-Za-z])alpha(?![a-z])"), "α"),
    (re.compile(r"(?<![A-Za-z])beta(?![a-z])"), "β"),
    (re.compile(r"(?<=\d )um\b"), "µm"),
    (re.compile(r"\s*->\s*"), " → "),
    (re.compile(rf"(?<=\d) (?={_UNIT}(?![A-Za-z]))"), NO_BREAK),
)
# what stands in texts of the bench; a longer formula comes before its beginning
_FORMULAS = (
    "BF3.OEt2", "Bi(OTf)3", "Sc(OTf)3", "Na2SO4", "NaHCO3", "Na2S2O3", "Ag2CO3", "CH2Cl2",
    "H2SO4", "InBr3", "SnCl4", "CDCl3", "Et3N", "Ac2O", "TMSN3", "NaN3", "BF3", "CO2", "H2O",
    "NH4", "NH3", "N2",
)  # fmt: skip
_TOKEN = re.compile(
    "|".join((
        r"(?P<bottle>(?<=bottle )[A-Z0-9][A-Za-z0-9-]*)",
        r"(?P<ion>\[\d?M[+-][A-Za-z0-9]+\][+-])",
        r"(?P<coupling>(?<![A-Za-z0-9])[123]J(?=[( ]))",
        r"(?P<nucleus>(?<![A-Za-z0-9])(?:1H|13C|19F)(?= NMR))",
        rf"(?P<formula>(?<![A-Za-z0-9])(?:{'|'.join(map(re.escape, _FORMULAS))})(?![A-Za-z0-9]))",
        r"(?P<proton>(?<![A-Za-z0-9])H\+(?![A-Za-z0-9]))",
        r"(?P<locant>(?<![A-Za-z])[ONS](?=-[a-z]))",
        r"(?P<series>(?<![A-Za-z0-9])[DL](?=-[A-Za-z]))",
        r"(?P<ratio>(?<![A-Za-z0-9])m/z(?![A-Za-z0-9]))",
    ))
)  # fmt: skip
_FORMULA_PART = re.compile(r"(\d+)|([^\d]+)")


def set_text(text: str | None) -> Rich:
    """A name or a sentence of the document.

    >>> set_text("octa-O-acetyl-beta-lactose").plain
    'octa-O-acetyl-β-lactose'
    >>> [run for run in set_text("BF3 etherate, 3 equiv") if run[0]]
    [('sub', '3')]
    """
    plain = text or ""
    for pattern, new in _PLAIN_CHANGES:
        plain = pattern.sub(new, plain)
    runs, end = Rich(), 0
    for found in _TOKEN.finditer(plain):
        _add(runs, "", plain[end : found.start()])
        for run in _styled(str(found.lastgroup), found.group()):
            _add(runs, *run)
        end = found.end()
    _add(runs, "", plain[end:])
    return runs


def set_formula(formula: str | None) -> Rich:
    """A molecular formula: digits as subscripts, a dot before what is bound as a whole.

    >>> set_formula("C17H30O11")
    [('', 'C'), ('sub', '17'), ('', 'H'), ('sub', '30'), ('', 'O'), ('sub', '11')]
    """
    text = (formula or "").replace(".", "·")
    return Rich(("sub" if digits else "", digits or other)
                for digits, other in _FORMULA_PART.findall(text))  # fmt: skip


def set_ion(ion: str) -> Rich:
    """An ion as mass spectrometry writes it: [M+NH4]+ with a subscript and a raised charge.

    >>> set_ion("[M-OAc]+")
    [('', '[M−OAc]'), ('sup', '+')]
    """
    body, charge = (ion[:-1], ion[-1]) if ion[-1:] in ("+", "-") else (ion, "")
    head, sign, added = re.fullmatch(r"(\[\d?M)?([+-])?(.*)", body).groups("")  # type: ignore[union-attr]
    runs = Rich()
    _add(runs, "", head + sign.replace("-", "\N{MINUS SIGN}"))
    for run in set_formula(added):
        _add(runs, *run)
    _add(runs, "sup", charge.replace("-", "\N{MINUS SIGN}"))
    return runs


def heading_name(name: str) -> str:
    """A name at the head of a line; a locant or a stereodescriptor is no beginning.

    >>> heading_name("octyl beta-lactoside"), heading_name("beta-lactose")
    ('Octyl beta-lactoside', 'beta-lactose')
    """
    is_word = re.match(r"(?!alpha\b|beta\b|tert\b|sec\b)[a-z]{3,}", name)
    return name[0].upper() + name[1:] if is_word else name


def _add(runs: Rich, style: str, text: str) -> None:
    """Append; neighbours of one style become one run."""
    if not text:
        return
    if runs and runs[-1][0] == style:
        runs[-1] = (style, runs[-1][1] + text)
    else:
        runs.append((style, text))


def _styled(kind: str, text: str) -> Rich:
    if kind == "ion":
        return set_ion(text)
    if kind == "formula":
        return set_formula(text)
    if kind == "coupling":
        return Rich([("sup", text[0]), ("i", text[1:])])
    if kind == "nucleus":
        return Rich([("sup", text[:-1]), ("", text[-1])])
    if kind == "proton":
        return Rich([("", "H"), ("sup", "+")])
    styles = {"series": "small", "bottle": "code", "locant": "i", "ratio": "i"}
    return Rich([(styles[kind], text)])
