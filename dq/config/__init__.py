"""The TOML configuration: every key with unit, bounds, default and its origin.

``load_config`` reads the file into frozen sections. A stage never sees the file: it
receives its own section. Paths stay relative to the file's folder (``Config.base``).
"""

from dq.config.data import Data, Layout, ReadyMask, Site
from dq.config.load import Config, digest, load_config, parse_config
from dq.config.search import Conditioning, Families, Tiles, Transients
from dq.config.vetoes import NEVER_VETOED, Vetoes
from dq.config.witnesses import Product, Witnesses

__all__ = [
    "NEVER_VETOED",
    "Conditioning",
    "Config",
    "Data",
    "Families",
    "Layout",
    "Product",
    "ReadyMask",
    "Site",
    "Tiles",
    "Transients",
    "Vetoes",
    "Witnesses",
    "digest",
    "load_config",
    "parse_config",
]
