"""Which source a name means."""

from __future__ import annotations

from pathlib import Path

from rxchain.errors import SettingError, SourceError
from rxchain.sources.protocol import Source
from rxchain.sources.raw_recording import RawRecording
from rxchain.sources.sample_formats import BY_SUFFIX
from rxchain.sources.sigmf_recording import SigmfRecording
from rxchain.sources.wave_recording import WaveRecording

_SIGMF = (".sigmf-meta", ".sigmf-data", ".sigmf")
_WAVE = (".wav", ".rf64", ".flac", ".w64")
RECEIVER_PREFIX = "rtlsdr"


def open_source(
    name: str,
    *,
    rate_hz: float | None = None,
    centre_hz: float | None = None,
    capture: int | None = None,
    gain_db: float | None = None,
    headroom: bool = False,
    ppm: float = 0.0,
    direct_sampling: str | None = None,
    bias_voltage: bool = False,
) -> Source:
    """The source that ``name`` means, opened; raises :class:`SourceError` or :class:`SettingError`.

    ``rate_hz`` and ``centre_hz`` are for sources that do not tell them; a recording that does refuses others.
    """
    prefix, _, serial = name.partition(":")
    if prefix == RECEIVER_PREFIX:
        from rxchain.sources.rtlsdr_driver import ReceiverSettings
        from rxchain.sources.rtlsdr_receiver import RtlsdrReceiver

        if rate_hz is None or centre_hz is None:
            missing = "rate" if rate_hz is None else "centre"
            raise SettingError(missing, "(none)", "a receiver has to be told", f"add --{missing} FREQUENCY")
        settings = ReceiverSettings(rate_hz, centre_hz, gain_db, ppm, direct_sampling, headroom, bias_voltage)
        return RtlsdrReceiver(serial or None, settings)
    for key, value in (
        ("gain", "headroom" if headroom else gain_db),
        ("ppm", ppm or None),
        ("direct_sampling", direct_sampling),
        ("bias_voltage", "on" if bias_voltage else None),
    ):
        if value is not None:
            raise SettingError(key, value, "is for receivers", "leave it out for a recording")
    path = Path(name)
    suffix = path.suffix.lower()
    if suffix in _SIGMF:
        for key, given_hz in (("rate", rate_hz), ("centre", centre_hz)):
            if given_hz is not None:
                raise SettingError(key, f"{given_hz:g}Hz", "a SigMF recording tells its own", "leave it out")
        return SigmfRecording(path, capture)
    if capture is not None:
        raise SettingError("capture", capture, "is for SigMF recordings", "leave it out")
    if suffix in _WAVE:
        return WaveRecording(path, rate_hz, centre_hz)
    if suffix in BY_SUFFIX:
        return RawRecording(path, rate_hz, centre_hz)
    known = ", ".join((*_SIGMF, *_WAVE, *BY_SUFFIX))
    raise SourceError(f"{name}: not a source known here; served are files named {known}, rtlsdr[:serial], and .toml")
