"""Multi-Q tiling: planned from a mismatch, computed by one inverse FFT per row."""

from dq.tiles.climb import climb_from
from dq.tiles.phase import tile_phase
from dq.tiles.plan import TilePlan, band_weights, plan_tiles
from dq.tiles.transform import TileRuns, row_coefficients, tile_runs

__all__ = [
    "TilePlan",
    "TileRuns",
    "band_weights",
    "climb_from",
    "plan_tiles",
    "row_coefficients",
    "tile_phase",
    "tile_runs",
]
