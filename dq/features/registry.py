"""All features in the order of the table's columns."""

from __future__ import annotations

from dq.features import comb, context, decay, energy, extent, ridge, shape, spectrum
from dq.features.spec import Feature

#: Every feature, group after group; a model file keeps these names.
FEATURES: tuple[Feature, ...] = (
    *extent.FEATURES,
    *spectrum.FEATURES,
    *energy.FEATURES,
    *ridge.FEATURES,
    *decay.FEATURES,
    *comb.FEATURES,
    *shape.FEATURES,
    *context.FEATURES,
)

#: Column names of a feature table.
NAMES: tuple[str, ...] = tuple(f.name for f in FEATURES)
