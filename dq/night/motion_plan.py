"""Which channels get slow and derived witnesses, and what they are called."""

from __future__ import annotations

from dataclasses import asdict, dataclass

from dq.config import Config
from dq.motion import FringeSource, length_scale, octave_bands
from dq.night.blocks import default_low_edge
from dq.store import Channel

#: Quantities of the channel list that predict a fringe frequency.
_MOVING = ("displacement", "velocity")

#: Lowest rate that holds motion up to the stop band of the speed's filter, Hz.
_LEAST_FRINGE_RATE = 16.0


@dataclass(frozen=True)
class MotionPlan:
    """What is derived from one channel; equal plans on equal samples give equal tables.

    Attributes
    ----------
    bands : tuple of (float, float)
        Octaves whose level is watched, Hz.
    rms_ladder, fringe_ladder : tuple of float
    source : FringeSource or None
        None: no fringe frequency is predicted.
    passes : tuple of int
    edge_hz : float
        Lower edge of the strain's band.
    wavelength_m : float
    notes : tuple of str
    """

    bands: tuple[tuple[float, float], ...] = ()
    rms_ladder: tuple[float, ...] = ()
    source: FringeSource | None = None
    passes: tuple[int, ...] = ()
    fringe_ladder: tuple[float, ...] = ()
    edge_hz: float = 0.0
    wavelength_m: float = 0.0
    notes: tuple[str, ...] = ()

    def names(self, channel: str) -> list[str]:
        """Give the names of the derived channels."""
        names = [rms_name(channel, low, high) for low, high in self.bands]
        if self.source:
            names += [fringe_name(channel, n) for n in self.passes]
        return names

    def key(self) -> dict:
        """Give the plan as plain values, for the key of a channel's state."""
        return asdict(self)


def rms_name(channel: str, low_hz: float, high_hz: float) -> str:
    """Name a band's level; ``@`` occurs in no channel's name."""
    return f"{channel}@rms-{low_hz:g}-{high_hz:g}Hz"


def fringe_name(channel: str, passes: int) -> str:
    """Name a predicted fringe frequency."""
    return f"{channel}@fringe-n{passes}"


def strain_edge(strain: Channel, rate: float, config: Config) -> float:
    """Give the lower edge of the strain's band in Hz."""
    return strain.f_low_hz or config.tiles.f_low_hz or default_low_edge(rate)


def plan_motion(
    row: Channel, rate: float, unit: str, config: Config, edge_hz: float
) -> MotionPlan | None:
    """Say what is derived from a channel.

    Parameters
    ----------
    row : Channel
        Its row of the channel list.
    rate : float
        Hz.
    unit : str
        Of the recording, used where the list gives none.
    config : Config
    edge_hz : float
        From :func:`strain_edge`.

    Returns
    -------
    MotionPlan or None
        None: nothing. Unsafe channels can never be witnesses, so nothing is derived
        from them; nor from the strain.
    """
    if row.role != "auxiliary" or row.safe == "no":
        return None
    settings = config.witnesses
    bands, notes, source = [], [], None
    if rate <= settings.slow_max_rate_hz:
        bands = octave_bands(settings.rms_low_hz, settings.rms_high_hz, rate)
    quantity = row.quantity.strip().lower()
    if quantity in _MOVING and settings.fringe_passes:
        unit = row.unit or unit
        scale = length_scale(unit, quantity)
        if scale is None:
            wanted = "m" if quantity == "displacement" else "m/s"
            notes.append(
                f"no fringe frequency: unit {unit!r} is no {quantity}; give {wanted} "
                "with an SI prefix (such as um) in the channel list"
            )
        elif rate < _LEAST_FRINGE_RATE:
            notes.append(
                f"no fringe frequency: {rate:g} Hz is below {_LEAST_FRINGE_RATE:g} Hz"
            )
        else:
            source = FringeSource(quantity == "velocity", scale)
    if not bands and source is None and not notes:
        return None
    return MotionPlan(
        bands=tuple(bands),
        rms_ladder=tuple(settings.rms_thresholds),
        source=source,
        passes=tuple(settings.fringe_passes),
        fringe_ladder=tuple(settings.fringe_thresholds),
        edge_hz=edge_hz,
        wavelength_m=settings.wavelength_nm * 1e-9,
        notes=tuple(notes),
    )
