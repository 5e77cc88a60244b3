"""Put consecutive pieces of a turned stream together, or keep the beginning of one."""

from __future__ import annotations

from dataclasses import fields

import numpy as np

from rxchain.carrier.track import Track, Turned

_READINGS = tuple(field.name for field in fields(Track))


def join(pieces: list[Turned], n_channels: int, hop_samples: int) -> Turned:
    """The pieces as one; no piece gives a turned stream of no samples."""
    if len(pieces) == 1:
        return pieces[0]
    if not pieces:
        nothing = np.zeros((n_channels, 0))
        track = Track(nothing, nothing, nothing, nothing, np.zeros((n_channels, 0), np.int8))
        return Turned(np.zeros((n_channels, 0), np.complex64), track, hop_samples)
    readings = {name: np.concatenate([getattr(p.track, name) for p in pieces], axis=1) for name in _READINGS}
    return Turned(np.concatenate([piece.iq for piece in pieces], axis=1), Track(**readings), hop_samples)


def beginning(turned: Turned, samples: int) -> Turned:
    """The first samples of a piece, with the readings of all hops they reach into."""
    hops = -(-samples // turned.hop_samples)
    track = Track(**{name: getattr(turned.track, name)[:, :hops] for name in _READINGS})
    return Turned(turned.iq[:, :samples], track, turned.hop_samples)
