"""Which flask, which beaker, which funnel."""

FLASKS_ML = (5, 10, 25, 50, 100, 250, 500, 1000, 2000, 4000, 10000)
BEAKERS_ML = (25, 50, 100, 150, 250, 400, 600, 800, 1000, 2000, 3000, 5000, 10000)
FUNNELS_ML = (50, 100, 250, 500, 1000, 2000, 5000, 10000)
MOST_FILL = 0.5  # a flask is filled to 20 to 60 %; half leaves room for the promoter
QUENCH_HEAD_SPACE = 2.0  # the beaker holds twice the total liquid
FUNNEL_FILL = 2 / 3  # never more, or it cannot be vented


def smallest_that_holds(sizes_ml: tuple[int, ...], volume_ml: float) -> int:
    """The smallest standard size of at least `volume_ml`, or the largest there is."""
    return next((size for size in sizes_ml if size >= volume_ml), sizes_ml[-1])


def reaction_flask_ml(liquid_ml: float) -> int:
    return smallest_that_holds(FLASKS_ML, liquid_ml / MOST_FILL)


def quench_beaker_ml(liquid_ml: float) -> int:
    return smallest_that_holds(BEAKERS_ML, liquid_ml * QUENCH_HEAD_SPACE)


def funnel_ml(liquid_ml: float) -> int:
    return smallest_that_holds(FUNNELS_ML, liquid_ml / FUNNEL_FILL)
