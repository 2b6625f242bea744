"""What goes into a release and what comes out: the plan, the records, the published values."""

from dataclasses import dataclass, field

import numpy as np

from .disclosure import Rules
from .errors import InputError
from .publication import stand_behind
from .rounding import check_base

WITHHOLD, MERGE, ROUND, CONTROLLED, NOISE = "withhold", "merge", "round", "controlled", "noise"
METHODS = (WITHHOLD, MERGE, ROUND, CONTROLLED, NOISE)


@dataclass(frozen=True)
class Plan:
    """How to release.

    Attributes
    ----------
    method : str
        One of METHODS.
    rules : disclosure.Rules
    region_totals, grand_total : bool
        Totals that are published beside the cells.
    totals_stand : bool
        The totals are public already and cannot be withheld.
    show_empty : bool
        Publish empty cells as 0 (withhold, merge). Otherwise they look like withheld ones, so that
        nobody learns of a withheld cell that it is not empty.
    base : int
        Of rounding.
    epsilon : float
    contribution_limit : int
        Most records of one contributor that noise hides.
    clip : bool
        Lift negative noisy counts to 0.
    reach : int
        Largest distance of two cells of a merged zone, in steps.
    seed : int or None
        None: a secret of the system's secure source, which is forgotten.
    """

    method: str = WITHHOLD
    rules: Rules = field(default_factory=Rules)
    region_totals: bool = False
    grand_total: bool = False
    totals_stand: bool = False
    show_empty: bool = False
    base: int = 10
    epsilon: float = 1.0
    contribution_limit: int = 1
    clip: bool = False
    reach: int = 5
    seed: int = None

    def __post_init__(self):
        if self.method not in METHODS:
            raise InputError("METHOD must be one of {}; found {}.", ", ".join(METHODS), self.method)
        if self.method in (ROUND, CONTROLLED):
            check_base(self.base, self.rules)
        if self.method == NOISE and self.region_totals:
            raise InputError(
                "Noise spends its budget on the cells; region totals besides would cost another. "
                "Add up the released cells, or choose another method."
            )
        if self.method == NOISE and self.totals_stand:
            raise InputError(
                "Noise promises nothing for totals that are public already; choose another method."
            )
        if self.reach < 1:
            raise InputError("A merged zone must be able to reach 1 step; found {}.", self.reach)


@dataclass(frozen=True)
class Records:
    """The records of a release, (n,) arrays.

    Attributes
    ----------
    cells : int
        Cell of each record in the tiling, negative: outside.
    weights, numerator : float or None
    contributors : int or None
        Codes as from `disclosure.contributor_codes`.
    regions : int or None
        Negative: in none.
    """

    cells: np.ndarray
    weights: np.ndarray = None
    numerator: np.ndarray = None
    contributors: np.ndarray = None
    regions: np.ndarray = None

    def behind(self, zone_of, zone_count, rules):
        """What stands behind the zones of cells."""
        zones = np.where(self.cells >= 0, zone_of[self.cells], -1)
        return stand_behind(
            zones, zone_count, rules, self.weights, self.contributors, self.numerator
        )


@dataclass(frozen=True)
class Release:
    """What may be published, and what only the custodian may see.

    Attributes
    ----------
    zones : (cells,) int array
        Zone of each cell of the tiling.
    values : (parts, zones) float array
        Published: the count, or numerator and rest; NaN where nothing is.
    region_values : (parts, regions) float array
    grand_values : (parts,) float array
        NaN where no such total is published.
    unsafe, complementary : (zones,) bool arrays
        Confidential: unsafe by the rules, and withheld to protect others.
    behind : publication.Behind
        Confidential: the true figures.
    left_out : int
        Records that noise left out to bound contributions.
    """

    zones: np.ndarray
    values: np.ndarray
    region_values: np.ndarray
    grand_values: np.ndarray
    unsafe: np.ndarray
    complementary: np.ndarray
    behind: object
    left_out: int = 0

    @property
    def withheld(self):
        return np.isnan(self.values[0])

    def count(self):
        return self.values.sum(0)

    def numerator(self):
        return self.values[0] if len(self.values) > 1 else None

    def share(self):
        """Numerator over count of the published figures, NaN where there is none."""
        if len(self.values) < 2:
            return None
        count = self.count()
        with np.errstate(invalid="ignore"):
            return np.divide(
                self.values[0], count, out=np.full(len(count), np.nan), where=count > 0
            )
