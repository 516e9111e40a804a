"""What a plant says of one tag at one instant; every wire carries these."""

from dataclasses import dataclass

from agent.siteplan.plan import Input
from simulator.instrument_faults import SampleQuality


@dataclass(frozen=True, slots=True, kw_only=True)
class Sample:
    """One tag at one instant, in the plant's unit."""

    tag: Input
    time: float  # unix seconds, UTC, by the source's clock
    value: float | bool | str | None  # None: the instrument gives none
    quality: SampleQuality = SampleQuality.GOOD
    historical: bool = False  # kept while the link was lost; not what holds now

    @property
    def stated_quality(self) -> SampleQuality:
        """What goes on the wire: what has no value is bad."""
        return SampleQuality.BAD if self.value is None else self.quality
