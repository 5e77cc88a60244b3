"""The figures measured of one channel, as the summary, the dashboard and the log show them."""

from __future__ import annotations

from dataclasses import dataclass, fields

from rxchain.streams import Reading


@dataclass(frozen=True, slots=True)
class Figures:
    """Measured figures, each with one standard deviation; None where a figure has no meaning or cannot be told.

    snr_db : power of the detected message over power of the noise in the same audio band, while the emission is present.
    carrier_offset_hz : received carrier (or the carrier the sidebands imply) less the nominal frequency.
    carrier_to_noise_density_dbhz : carrier power over noise power per hertz.
    depth_positive_percent, depth_negative_percent : peak rise and fall of the true envelope over the mean carrier.
    depth_percent : half the peak-to-peak.
    power_efficiency_percent : sideband power over total power.
    level_dbfs : mean power in the channel against a full-scale complex tone.
    """

    snr_db: Reading | None = None
    carrier_offset_hz: Reading | None = None
    carrier_to_noise_density_dbhz: Reading | None = None
    depth_percent: Reading | None = None
    depth_positive_percent: Reading | None = None
    depth_negative_percent: Reading | None = None
    power_efficiency_percent: Reading | None = None
    level_dbfs: Reading | None = None

    def as_json(self) -> dict[str, dict[str, float] | None]:
        """The figures under their names, as ``summary.json`` has them."""
        readings = {field.name: getattr(self, field.name) for field in fields(self)}
        return {name: reading.as_json() if reading is not None else None for name, reading in readings.items()}
