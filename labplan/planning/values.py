"""The values planning works on. Units stand last in the names; everything here is frozen."""

from dataclasses import dataclass
from datetime import date

from labplan.chemistry.amounts import Content
from labplan.chemistry.structures import Structure


@dataclass(frozen=True)
class Scale:
    """What was asked for: a mass of product [mg] or an amount of acceptor [mmol], one of them."""

    product_mass_mg: float | None = None
    acceptor_amount_mmol: float | None = None


@dataclass(frozen=True)
class Wishes:
    """What the requester insists on, by substance key; None leaves it to labplan."""

    promoter: str | None = None
    solvent: str | None = None


@dataclass(frozen=True)
class ShelfBottle:
    """One bottle as the shelf shows it. Amounts in mg ("mass") or mL ("volume"), or pieces.

    `usable` is what is on hand less what is held less what cannot be got out.
    """

    code: str
    substance: str
    name: str
    cas: str
    smiles: str
    inchikey: str | None
    content: Content | None  # None for a material or mixture without a molar mass
    form_label: str
    measured_by: str
    on_hand: float
    held: float
    usable: float
    place: str
    place_name: str
    lot: str
    status: str
    expires_on: date | None
    opened_on: date | None
    stabiliser_state: str
    stabiliser_name: str
    water_ppm: float | None
    water_read_on: date | None
    activated_on: date | None
    density_g_per_ml: float | None = None
    loading_equiv_per_l: float | None = None  # of a resin
    solvent: str | None = None  # of a solution, by substance key
    solvent_name: str | None = None


@dataclass(frozen=True)
class Reason:
    """Why not, or what was assumed: `code` for programs, `detail` for people."""

    code: str
    detail: str


@dataclass(frozen=True)
class RouteWarning:
    code: str
    severity: str  # "note", "caution", "stop"
    detail: str


@dataclass(frozen=True)
class Shortage:
    """One line that no bottle can meet."""

    stage: str
    role: str
    substance: str
    name: str
    needed: str
    largest_usable: str
    detail: str


@dataclass(frozen=True)
class PassedOver:
    """A bottle that was looked at and not taken, and why."""

    bottle: str
    name: str
    role: str
    reason: str


@dataclass(frozen=True)
class Charge:
    """One line of what goes into the flask or is used on it.

    `hold_amount` is in the bottle's own base unit (micrograms or nanolitres) and is what is
    set aside; the printed amount is the same number. Without a bottle it comes from the
    laboratory's supply or, with `from_stage`, from an earlier stage.
    """

    key: str
    role: str
    group: str  # "reaction", "work-up", "purification"
    substance: str
    name: str
    bottle: ShelfBottle | None
    from_stage: int | None
    equivalents_planned: float | None
    equivalents: float | None
    equivalents_of: str | None
    amount_mmol: float | None
    mass_mg: float | None
    volume_ml: float | None
    dispense: str  # "mass" or "volume"
    assay_note: str
    hold_amount: int


@dataclass(frozen=True)
class Water:
    """Where the water comes from, and its amount in % of that of the promoter and of the donor."""

    lines: tuple[tuple[str, float | None], ...]  # (charge key, mmol or None when unknown)
    total_mmol: float
    promoter_share_pct: float
    donor_share_pct: float


@dataclass(frozen=True)
class Quench:
    """The neutralisation after a Lewis acid: acid set free, base with its excess, gas, vessel."""

    vessel_ml: int
    acid_mmol: float
    bicarbonate_mmol: float
    clear_solution_ml: float  # what would dissolve it all at 0 °C
    carbon_dioxide_l: float


@dataclass(frozen=True)
class Step:
    """One numbered instruction. `charges` are the keys of the charges it uses."""

    number: int
    title: str
    text: str
    charges: tuple[str, ...]
    watch: str
    pause: str  # "may stand overnight" or "do not stop"


@dataclass(frozen=True)
class Ion:
    species: str
    ion: str
    mz: float


@dataclass(frozen=True)
class Stage:
    """One flask: its charges, its vessels, what it gives. Masses of product pure, in mg."""

    number: int
    kind: str  # "acetylation", "coupling", "deacetylation"
    method: str
    method_name: str
    limiting: str
    scale_mmol: float
    is_provisional: bool  # its limiting charge is what an earlier stage really gives
    product: Structure
    product_name: str
    charges: tuple[Charge, ...]
    vessel_ml: int
    yield_pct: tuple[float, float, float]  # low, planned, high
    gross_mass_mg: float
    gross_means: str
    water: Water | None = None
    quench: Quench | None = None
    adiabatic_rise_k: float | None = None
    ions: tuple[Ion, ...] = ()
    steps: tuple[Step, ...] = ()

    @property
    def expected_low_mg(self) -> float:
        return self._expected_mg(self.yield_pct[0])

    @property
    def expected_mass_mg(self) -> float:
        return self._expected_mg(self.yield_pct[1])

    @property
    def expected_high_mg(self) -> float:
        return self._expected_mg(self.yield_pct[2])

    def _expected_mg(self, pct: float) -> float:
        return self.scale_mmol * self.product.molar_mass_g_per_mol * pct / 100


@dataclass(frozen=True)
class SideProduct:
    name: str
    formula: str
    monoisotopic_mass_da: float
    told_apart_by: str


@dataclass(frozen=True)
class Expectations:
    """Of the whole route: the product's ions first, then those of what may be left."""

    ions: tuple[Ion, ...]
    side_products: tuple[SideProduct, ...]
    anomeric_coupling_hz: tuple[float, float] | None
    anomeric_signal: str
    mass_mg: tuple[float, float, float] | None  # low, planned, high: the yields in quadrature


@dataclass(frozen=True)
class Route:
    """Stages in the order they are run, or none with the shortages that prevent them."""

    rank: int
    method: str
    method_name: str
    stages: tuple[Stage, ...]
    why: tuple[str, ...]
    warnings: tuple[RouteWarning, ...]
    shortages: tuple[Shortage, ...]
    passed_over: tuple[PassedOver, ...]

    @property
    def is_available(self) -> bool:
        return not self.shortages
