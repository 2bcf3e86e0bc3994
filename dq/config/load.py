"""From a TOML file to checked sections, or to one line that says what is wrong."""

from __future__ import annotations

import difflib
import hashlib
import json
import tomllib
from pathlib import Path

from pydantic import BaseModel, Field, ValidationError

from dq.config.data import Data, Site
from dq.config.search import Conditioning, Families, Tiles, Transients
from dq.config.section import Section
from dq.config.vetoes import Vetoes
from dq.config.witnesses import Witnesses
from dq.errors import ConfigError


class Config(Section):
    """One configuration file."""

    site: Site
    data: Data
    conditioning: Conditioning = Conditioning()
    tiles: Tiles = Tiles()
    transients: Transients = Transients()
    families: Families = Families()
    witnesses: Witnesses = Witnesses()
    vetoes: Vetoes = Vetoes()
    base: Path = Field(default=Path("."), exclude=True)

    def path(self, relative: str) -> Path:
        """Resolve a path of the file against the file's folder."""
        return self.base / relative


def digest(*sections: BaseModel) -> str:
    """Give the sha256 of the sections' values as canonical JSON."""
    values = [s.model_dump(mode="json") for s in sections]
    text = json.dumps(values, sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()


def load_config(path: str | Path) -> Config:
    """Read and check a configuration file.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    Config

    Raises
    ------
    ConfigError
        The file cannot be read, is no TOML, or a key is unknown, missing or out of
        its bounds; the message names the key, the value, the bound and the remedy.
    """
    path = Path(path)
    try:
        raw = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise ConfigError(
            f"cannot read config {str(path)!r}: {error.strerror}; check the path"
        ) from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise ConfigError(f"config {str(path)!r} is not TOML: {error}") from error
    return parse_config(raw, base=path.parent, where=str(path))


def parse_config(raw: dict, *, base: Path = Path("."), where: str = "config") -> Config:
    """Turn a parsed TOML table into a checked ``Config``; errors as ``load_config``."""
    if "base" in raw:
        raise ConfigError(f"{where}: unknown key 'base'; remove it")
    try:
        config = Config(**raw, base=base)
    except ValidationError as error:
        raise ConfigError(f"{where}: {_one_line(error)}") from error
    _check_between(config, where)
    return config


#: Lists that must be positive and rising.
_LADDERS = (
    "snr_thresholds",
    "half_windows_s",
    "rms_thresholds",
    "fringe_passes",
    "fringe_thresholds",
)


def _check_between(config: Config, where: str) -> None:
    tiles = config.tiles
    if tiles.q_max <= tiles.q_min:
        raise ConfigError(
            f"{where}: tiles.q_max={tiles.q_max} must be above "
            f"tiles.q_min={tiles.q_min}; raise q_max"
        )
    if tiles.f_low_hz and tiles.f_high_hz and tiles.f_high_hz <= tiles.f_low_hz:
        raise ConfigError(
            f"{where}: tiles.f_high_hz={tiles.f_high_hz} must be above "
            f"tiles.f_low_hz={tiles.f_low_hz}"
        )
    for name in _LADDERS:
        values = getattr(config.witnesses, name)
        if any(v <= 0 for v in values) or sorted(set(values)) != values:
            raise ConfigError(
                f"{where}: witnesses.{name}={values} must be positive and rising"
            )
    pairs = [(p.fast, p.slow) for p in config.witnesses.products]
    for pair in pairs:
        if pair[0] == pair[1] or pairs.count(pair) > 1:
            raise ConfigError(
                f"{where}: witnesses.products fast={pair[0]!r} slow={pair[1]!r}: name "
                "two different channels, and each pair once"
            )
    layout = config.data.layout
    if layout and (layout.step_attribute is None) == (layout.rate_attribute is None):
        raise ConfigError(
            f"{where}: data.layout needs exactly one of step_attribute and "
            "rate_attribute; give the one that the files carry"
        )
    if config.data.ready and config.data.ready_mask:
        raise ConfigError(
            f"{where}: data.ready and data.ready_mask exclude each other; keep one"
        )


def _known_keys(location: tuple) -> list[str]:
    model: type[BaseModel] = Config
    for part in location:
        field = model.model_fields.get(str(part))
        if field is None:
            return []
        kinds = [field.annotation, *getattr(field.annotation, "__args__", ())]
        models = [k for k in kinds if isinstance(k, type) and issubclass(k, BaseModel)]
        if not models:
            return []
        model = models[0]
    return [k for k in model.model_fields if k != "base"]


def _one_line(error: ValidationError) -> str:
    first = error.errors()[0]
    location = tuple(first["loc"])
    key = ".".join(str(p) for p in location)
    if first["type"] == "extra_forbidden":
        known = _known_keys(location[:-1])
        near = difflib.get_close_matches(str(location[-1]), known, n=1, cutoff=0.0)
        hint = f"; nearest known key is {near[0]!r}" if near else ""
        return f"unknown key {key!r}{hint}"
    if first["type"] == "missing":
        return f"key {key!r} is required; add it"
    message = first["msg"].removeprefix("Value error, ")
    message = message[0].lower() + message[1:]
    value = repr(first["input"])
    value = value if len(value) < 80 else value[:77] + "..."
    return f"{key} = {value}: {message}"
