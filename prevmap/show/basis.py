"""What a unit's estimate rests on: its own sites, other places, or nothing at all."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from prevmap.show.wording import NARROW_SPACE, count, listed, percent

_MOST_NAMES = 12

Mask = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class UnitBasis:
    """Units by what their estimate rests on; every unit is in one of the first four masks, each (n,).

    Attributes
    ----------
    own : (n,) bool
        With surveyed sites in the model.
    unplaced : (n,) bool
        Surveyed, but at no site with a position: the estimate comes from elsewhere.
    bare : (n,) bool
        Without a surveyed site.
    unpredicted : (n,) bool
        Without any prediction, whether surveyed or not.
    names : tuple of str
        Names of the units.
    """

    own: Mask
    unplaced: Mask
    bare: Mask
    unpredicted: Mask
    names: tuple[str, ...]

    @property
    def borrowed(self) -> Mask:
        """Units (n,) whose estimate comes from elsewhere."""
        return self.unplaced | self.bare

    def named(self, mask: Mask) -> str:
        """Print the names of the chosen units; of many only the first ones."""
        return _first([name for name, here in zip(self.names, mask, strict=True) if here])

    def sentences(self, *, hatched: bool = False) -> list[str]:
        """Count the units that do not rest on sites of their own, one sentence for each reason."""
        total = count(len(self.names), "unit")
        mark = "Hatched: " if hatched else ""
        found = []
        for mask, lack in (
            (self.bare, "without a surveyed site"),
            (self.unplaced, "with sites but none with a position"),
        ):
            number = int(mask.sum())
            if number:
                found.append(f"{mark}{number:,} of {total} {lack}; the estimate comes from elsewhere.")
        number = int(self.unpredicted.sum())
        if number:
            found.append(f"No prediction, covariates missing: {self.named(self.unpredicted)}.")
        return found or [f"{total}, each with surveyed sites of its own."]

    def of(self, i: int, basis: str) -> str:
        """Print the basis of one unit in a table cell."""
        if self.unpredicted[i]:
            return "no prediction: covariates missing"
        return f"{basis}; no site with a position" if self.unplaced[i] else basis


def _first(words: list[str]) -> str:
    """List words; of many only the first ones, with the number of the others."""
    more = len(words) - _MOST_NAMES
    return listed(words) if more <= 0 else f"{', '.join(words[:_MOST_NAMES])} and {more:,} more"


def unit_basis(frame: Any) -> UnitBasis:
    """Sort the units of ``UnitEstimates.frame`` by what their estimate rests on."""
    unpredicted = frame["mean"].isna().to_numpy(dtype=bool)
    own = (frame["basis"] == "own sites").to_numpy(dtype=bool) & ~unpredicted
    surveyed = (frame["sites"] > 0).to_numpy(dtype=bool)
    rest = ~own & ~unpredicted
    names = tuple(str(name) for name in frame["unit"])
    return UnitBasis(own, rest & surveyed, rest & ~surveyed, unpredicted, names)


def weight_notes(units: Any) -> list[str]:
    """Name units weighted by area although a population was given, and units predicted in part only."""
    notes = []
    frame = units.frame
    names = [str(name) for name in frame["unit"]]
    # Without any population the text says so already.
    if "weighting" in frame and units.weighting == "population":
        by_area = frame["weighting"] == "area"
        chosen = [name for name, here in zip(names, by_area, strict=True) if here]
        if chosen:
            notes.append(
                f"Weighted by area, since the population file counts nobody there: {_first(chosen)}."
            )
    if "share_without_prediction" in frame:
        share = frame["share_without_prediction"].to_numpy(dtype=float)
        partly = (share > 0.0) & frame["mean"].notna().to_numpy(dtype=bool)
        parts = [
            f"{name}{NARROW_SPACE}({percent(part)})"
            for name, part, here in zip(names, share, partly, strict=True)
            if here
        ]
        if parts:
            notes.append(
                "Without a prediction for part of the unit, where a covariate is missing "
                f"(share of its weight that the estimate leaves out): {_first(parts)}."
            )
    return notes
