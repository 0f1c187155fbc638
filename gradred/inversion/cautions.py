"""What stands beside every model that leaves gradred."""

from __future__ import annotations

from typing import Final

CAUTION: Final = (
    "A density model from gravity gradients is not unique: other bodies explain the same readings. "
    "Standard errors hold for the kind of model that was fitted and for the stated noise, not for "
    "the geology. Not for navigation, obstacle clearance, dig or drilling safety, or statements of "
    "reserves; local codes and licensed practice decide."
)
