"""Print amounts and names the way they are read on a balance, a syringe or in a sentence."""

import re

# The first word of three letters or more; shorter ones are locants, D, L, O, N.
_FIRST_WORD = re.compile(r"[A-Za-z]{3,}")
_PROPER_NAMES = ("Celite", "Fmoc", "Boc", "Cbz")


def mass_text(mass_mg: float) -> str:
    """What a laboratory balance shows: milligrams to the gram, then grams to the milligram.

    >>> mass_text(935.0), mass_text(6249.0), mass_text(2000.0)
    ('935 mg', '6.249 g', '2.000 g')
    """
    return f"{mass_mg:.0f} mg" if mass_mg < 1000 else f"{mass_mg / 1000:.3f} g"


def bulk_text(mass_mg: float) -> str:
    """What a kitchen balance shows, for salts, sieves and silica.

    >>> bulk_text(8340.0), bulk_text(13_100.0), bulk_text(152_000.0)
    ('8.34 g', '13.1 g', '152 g')
    """
    return f"{mass_mg / 1000:.6g} g"


def volume_text(volume_ml: float) -> str:
    """Reacting liquids, with the digits of the syringe or cylinder.

    >>> volume_text(3.51), volume_text(1.4), volume_text(14.0)
    ('3.51 mL', '1.40 mL', '14.0 mL')
    """
    if volume_ml < 5:
        return f"{volume_ml:.2f} mL"
    return f"{volume_ml:.1f} mL" if volume_ml <= 50 else f"{volume_ml:.0f} mL"


def two_figures(value: float) -> str:
    """For what is only an upper bound.

    >>> two_figures(2.208), two_figures(12.7), two_figures(0.342)
    ('2.2', '13', '0.34')
    """
    return f"{float(f'{value:.2g}'):g}"


def three_figures(value: float) -> str:
    return f"{value:.3g}"


def in_sentence(name: str) -> str:
    """A substance's name inside a sentence.

    >>> in_sentence("1-Octanol"), in_sentence("D-Glucose"), in_sentence("Celite")
    ('1-octanol', 'D-glucose', 'Celite')
    """
    word = _FIRST_WORD.search(name)
    if word is None or word.group() in _PROPER_NAMES:
        return name
    return name[: word.start()] + word.group().lower() + name[word.end() :]


def bulk_volume_text(volume_ml: float) -> str:
    """Solvents and washes, as a measuring cylinder shows them.

    >>> bulk_volume_text(73.0), bulk_volume_text(1510.0), bulk_volume_text(11_948.0)
    ('73 mL', '1.51 L', '11.948 L')
    """
    if volume_ml >= 1000:
        return f"{volume_ml / 1000:.6g} L"
    return f"{volume_ml:.6g} mL"
