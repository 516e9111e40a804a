"""The few numbers by which a real cylinder departs from the ideal cycle."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Corrections:
    """Corrections of the cycle; the defaults stand for a cylinder nobody has measured yet.

    They are meant to be learned from a healthy machine. `ideal` switches every one of them off.
    """

    preheat: float = 0.05  # share of the isentropic temperature rise taken up by the gas on its way in
    expansion_exponent: float = 1.0  # exponent of the re-expansion / exponent of the gas path
    compression_exponent: float = 1.0
    valve_loss: float = 1.0  # flow resistance of all valves / that of their effective flow area
    valve_preload: float = 0.004  # pressure difference that just lifts a plate / line pressure
    valve_full_lift: float = 0.012  # pressure difference that lifts it fully / line pressure
    opening_overshoot: float = 1.0  # pressure beyond the line before the plate follows / its estimate
    opening_decay: float = 0.06  # how fast that dies away, in natural logarithm of volume
    heat_loss: float = 0.0  # share of the indicated power lost to the jacket
    volumetric_deficit: float = 0.0  # volumetric efficiency lost to late closing and small leaks

    @classmethod
    def nominal(cls) -> "Corrections":
        """The defaults: good to a few per cent on an unknown healthy machine."""
        return cls()

    @classmethod
    def ideal(cls) -> "Corrections":
        """The text-book cycle: no valve loss, no preheat."""
        return cls(preheat=0.0, valve_loss=0.0, valve_preload=0.0, valve_full_lift=0.0, opening_overshoot=0.0)
