"""Substances and the forms they come in."""

from django.db import models
from django.db.models import Q

from inventory.models.checks import MeasuredBy, one_of, whole_number


class SubstanceKind(models.TextChoices):
    DEFINED = "defined"
    MIXTURE = "mixture"
    MATERIAL = "material"


class Substance(models.Model):
    """What a bottle holds, whatever its form. Two bottles of one substance may replace each other.

    Identity of a defined substance is its whole InChIKey: sugars share formulas and first blocks.
    """

    Kind = SubstanceKind
    code = models.SlugField(max_length=80, unique=True)
    kind = models.CharField(max_length=10, choices=SubstanceKind)
    name = models.CharField(max_length=200)
    # NFKD, case-folded, Greek letters spelt: the databases do not agree on anything else.
    search_key = models.CharField(max_length=240, db_index=True)
    cas = models.CharField(max_length=12, blank=True, db_index=True)
    smiles = models.TextField(blank=True)
    inchikey = models.CharField(max_length=27, null=True, unique=True)
    formula = models.CharField(max_length=80, blank=True)
    molar_mass_g_per_mol = models.DecimalField(max_digits=10, decimal_places=4, null=True)
    density_g_per_ml = models.DecimalField(max_digits=7, decimal_places=4, null=True)
    density_temperature_c = models.DecimalField(max_digits=5, decimal_places=1, null=True)
    density_source = models.CharField(max_length=120, blank=True)
    # the stockroom buys when less than this can be used, in the base unit of minimum_measured_by
    minimum = models.BigIntegerField(null=True)
    minimum_measured_by = models.CharField(max_length=8, choices=MeasuredBy, blank=True)
    version = models.PositiveIntegerField(default=1)

    class Meta:
        constraints = [
            one_of("kind", SubstanceKind, name="substance_kind_known"),
            whole_number("minimum", lowest=0, name="substance_minimum_whole"),
            models.CheckConstraint(
                condition=Q(minimum__isnull=True, minimum_measured_by="")
                | Q(minimum__isnull=False, minimum_measured_by__in=MeasuredBy.values),
                name="substance_minimum_has_unit",
            ),
            models.CheckConstraint(
                condition=~Q(kind="defined") | (Q(inchikey__isnull=False) & ~Q(smiles="")),
                name="substance_defined_has_structure",
            ),
        ]

    def __str__(self) -> str:
        return self.name


class FormKind(models.TextChoices):
    NEAT = "neat"
    HYDRATE = "hydrate"
    SOLUTION = "solution"
    LOADED = "loaded"  # a resin or a supported reagent
    SALT = "salt"
    ANOMER_MIXTURE = "anomer_mixture"


class FormSolutionBasis(models.TextChoices):
    PCT_W_W = "pct_w_w"
    PCT_W_V = "pct_w_v"
    MOL_PER_L = "mol_per_l"
    EQUIV_PER_G = "equiv_per_g"
    EQUIV_PER_L = "equiv_per_l"


class Form(models.Model):
    """How a substance comes: neat, as a hydrate, in solution, as a salt, as a mix of anomers."""

    Kind = FormKind
    SolutionBasis = FormSolutionBasis
    substance = models.ForeignKey(Substance, models.PROTECT, related_name="forms")
    kind = models.CharField(max_length=16, choices=FormKind)
    # moles of water a mole of substance
    hydrate_water = models.DecimalField(max_digits=5, decimal_places=3, null=True)
    solution_basis = models.CharField(max_length=12, choices=FormSolutionBasis, blank=True)
    solution_value = models.DecimalField(max_digits=9, decimal_places=4, null=True)
    solution_solvent = models.ForeignKey(Substance, models.PROTECT, null=True, related_name="+")
    solution_temperature_c = models.DecimalField(max_digits=5, decimal_places=1, null=True)
    # the share that reacts, for a mix of anomers
    active_share_pct = models.DecimalField(max_digits=6, decimal_places=3, null=True)
    # where the form has a number of its own, as a hydrate does
    cas = models.CharField(max_length=12, blank=True)
    label = models.CharField(max_length=120)

    class Meta:
        constraints = [
            one_of("kind", FormKind, name="form_kind_known"),
            models.UniqueConstraint(fields=["substance", "label"], name="form_once"),
            # NULL > 0 is neither true nor false, and a CHECK takes that for a yes: hence "is not".
            models.CheckConstraint(
                condition=~Q(kind="hydrate")
                | Q(hydrate_water__isnull=False, hydrate_water__gt=0, hydrate_water__lte=30),
                name="form_hydrate_has_water",
            ),
            models.CheckConstraint(
                condition=~Q(kind__in=["solution", "loaded"])
                | Q(solution_value__isnull=False, solution_value__gt=0, solution_value__lte=10_000)
                & ~Q(solution_basis=""),
                name="form_solution_has_strength",
            ),
            models.CheckConstraint(
                condition=~Q(kind="anomer_mixture")
                | Q(
                    active_share_pct__isnull=False,
                    active_share_pct__gt=0,
                    active_share_pct__lte=100,
                ),
                name="form_mixture_has_share",
            ),
        ]

    def __str__(self) -> str:
        return self.label
