"""Scenes that several tests receive, and the way to receive them without files."""

from __future__ import annotations

import numpy as np

from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.emissions import EMISSIONS
from rxchain.sources.protocol import SourceInfo
from rxchain.streams import Block
from rxchain.synthesis.messages import Message
from rxchain.synthesis.modulation import Modulation
from rxchain.synthesis.render import RenderedScene, render
from rxchain.synthesis.scene import Scene, Station

CARRIER_DB = {"R3E": 18.0, "H3E": 4.5, "B8E": 20.0}  # 47 CFR 80.207(c); B8E: about 20 dB, from memory


def station(name: str, frequency_hz: float = 1e6, kind: str = "noise", **changes: object) -> Station:
    """One emission with a noise message (or tones) in the default band, at -20 dBFS."""
    emission = EMISSIONS[name]
    messages = tuple(
        Message("morse", text="CQ TEST ") if emission.family == "A1A"
        else Message(kind, frequencies_hz=(700.0 + 300.0 * k,) if kind == "tone" else ())
        for k in range(len(emission.messages))
    )  # fmt: skip
    how = Modulation(
        carrier_db=CARRIER_DB.get(emission.family, float("inf")),
        pilot_db=20.0 if emission.family == "QAM" else float("inf"),
        vestige_hz=emission.audio_hz[1] / 4,
    )
    given = {"how": how, **changes}
    return Station(name.lower(), emission, frequency_hz, -20.0, messages, emission.audio_hz, **given)  # type: ignore[arg-type]


def one_of_each(spacing_hz: float = 16_000.0, offset_hz: float = 0.0, kind: str = "noise") -> list[Station]:
    """Every emission, side by side; those that can be followed are off-tune."""
    stations = []
    for k, name in enumerate(EMISSIONS):
        off_hz = 0.0 if EMISSIONS[name].reference.value == "nominal" else offset_hz
        # Quadrature stereo is as wide as two: it stands at the end, with room.
        place = k if name != "AM-STEREO" else len(EMISSIONS) + 1
        stations.append(station(name, 1e6 + (place - 8) * spacing_hz, kind, offset_hz=off_hz, phase_degrees=29.0 * k))
    return stations


def channel_text(one: Station, extra: str = "agc=off squelch=off") -> str:
    """The channel that receives a station."""
    text = f"{one.frequency_hz:.6f}Hz {one.emission.name} name={one.name} {extra}"
    if one.emission.family != "A1A":
        text += f" audio={one.audio_hz[0]:g}-{one.audio_hz[1]:g}Hz"
    return text + (f" vestige={one.how.vestige_hz:g}Hz" if one.emission.is_vestigial else "")


def receive(
    scene: Scene, extra: str = "agc=off squelch=off", block: int = 12_000, rendered: RenderedScene | None = None
) -> tuple[RenderedScene, Receiver, list[np.ndarray]]:
    """The rendered scene, the receiver after it, and each channel's audio, (messages, n)."""
    rendered = rendered or render(scene)
    info = SourceInfo("recording", "scene", scene.rate_hz, scene.centre_hz, None, len(rendered.iq))
    receiver = Receiver(info, tuple(channel_from_text(channel_text(one, extra)) for one in scene.stations))
    blocks = [Block(rendered.iq[k : k + block], k) for k in range(0, len(rendered.iq), block)]
    return rendered, receiver, run_blocks(receiver, blocks)


def run_blocks(receiver: Receiver, blocks: list[Block]) -> list[np.ndarray]:
    """All audio of a receiver fed with these blocks, and its figures brought up to date."""
    audio: list[list[np.ndarray]] = [[] for _ in receiver.channels]
    for piece in [one for block in blocks for one in receiver.process(block)] + receiver.flush():
        audio[piece.place].append(piece.audio)
    receiver.measure(overall=True)
    return [np.concatenate(parts, axis=1) for parts in audio]


def resampled(message: np.ndarray, rate_hz: float, n: int, audio_rate_hz: float) -> np.ndarray:
    """A true message at the audio's rate, exact for what both rates hold; its first n samples."""
    whole = round(len(message) / rate_hz * audio_rate_hz)
    spectrum = np.fft.rfft(message)
    kept = np.zeros(whole // 2 + 1, complex)
    m = min(len(kept), len(spectrum))
    kept[:m] = spectrum[:m]
    return (np.fft.irfft(kept, whole) * (whole / len(message)))[:n]
