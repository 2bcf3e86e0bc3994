"""Multi-Q tiling: planned from a mismatch, computed by one inverse FFT per row."""

from dq.tiles.bright import BrightRuns
from dq.tiles.climb import climb_from
from dq.tiles.phase import tile_phase
from dq.tiles.plan import TilePlan, band_weights, plan_tiles
from dq.tiles.transform import TileRuns, row_coefficients, scan_tiles, tile_runs

__all__ = [
    "BrightRuns",
    "TilePlan",
    "TileRuns",
    "band_weights",
    "climb_from",
    "plan_tiles",
    "row_coefficients",
    "scan_tiles",
    "tile_phase",
    "tile_runs",
]
