"""The dashboard's picture from one snapshot: an overall line, a row a channel, a strip about the selected one."""

from __future__ import annotations

from typing import Literal

import numpy as np
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from rxchain.chain.status import ChannelStatus, ReceiverStatus
from rxchain.dashboard.bars import Glyphs, depth_bar, snr_bar, trend
from rxchain.dashboard.keys import HELP, Keyboard
from rxchain.dashboard.wording import LOCK_WORDS, SHORT_LOCK_WORDS, clean, duration, frequency, short, with_uncertainty
from rxchain.streams import Reading

WIDEST, WIDE, MEDIUM = 140, 112, 72
_DETAIL_LINES = 6
_STYLES = {"locked": "green", "held": "yellow", "none": "red", "nominal": "cyan"}


def picture(status: ReceiverStatus, keyboard: Keyboard, width: int, height: int, glyphs: Glyphs) -> RenderableType:
    """Everything that fits ``width`` by ``height`` characters."""
    if keyboard.shows_help:
        return help_page(width)
    selected = min(max(keyboard.selected, 0), max(0, len(status.channels) - 1))
    strip = width >= MEDIUM and height >= 16
    head = [overall_line(status, width)]
    if height >= 20 and len(status.spectrum_dbfs):
        head.append(spectrum_line(status, width, glyphs))
    rows = max(1, height - len(head) - 2 - (_DETAIL_LINES + 1 if strip else 0))
    first = min(max(0, selected - rows // 2), max(0, len(status.channels) - rows))
    parts: list[RenderableType] = [
        *head,
        channel_table(status.channels[first : first + rows], selected - first, width, glyphs),
    ]
    hidden = len(status.channels) - rows
    note = f"channels {first + 1}–{first + rows} of {len(status.channels)}  " if hidden > 0 else ""
    if strip and status.channels:
        parts.append(detail_strip(status.channels[selected], width, glyphs))
    parts.append(foot_line(status, keyboard, note, width))
    return Group(*parts)


def foot_line(status: ReceiverStatus, keyboard: Keyboard, note: str, width: int) -> Text:
    """What is being typed, or the answer to the latest wish, what is heard, and the way to the help."""
    if keyboard.typed is not None:
        return Text(f"word for the logbook: {keyboard.typed}_   (enter, or escape)", no_wrap=True, overflow="ellipsis")
    line = Text(no_wrap=True, overflow="ellipsis")
    if keyboard.is_frozen:
        line.append("FROZEN  ", style="bold yellow")
    sound = status.sound
    if sound is not None:
        muted = "muted" if sound.muted else f"{sound.volume_db:+.0f} dB"
        line.append(f"heard {clean(sound.heard)} {muted}  ", style="cyan")
        if sound.trouble:
            line.append(f"! {clean(sound.trouble)}  ", style="bold red")
    keys = f"{note}step {keyboard.step_hz:g} Hz  ? keys  q stop"
    said = clean(keyboard.operations.said)
    room = width - len(line) - len(keys) - 2
    # An answer is worth more than the reminder of the keys where both do not fit.
    line.append(f"{said}  " if len(said) <= room else said)
    if len(said) <= room:
        line.append(keys, style="dim")
    return line


def help_page(width: int) -> Table:
    """What each key does."""
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), width=width, show_header=False)
    table.add_column(style="bold", no_wrap=True)
    table.add_column()
    for keys, meaning in HELP:
        table.add_row(keys, meaning)
    table.add_row("", "any key: back")
    return table


def overall_line(status: ReceiverStatus, width: int) -> Text:
    """Source, time, progress, and whatever went wrong; trouble only where there is some."""
    line = Text(no_wrap=True, overflow="ellipsis")
    line.append(clean(status.source), style="bold")
    line.append(f"  {frequency(status.centre_hz)} ± {frequency(status.sample_rate_hz / 2)}")
    line.append(f"  {duration(status.elapsed_s)}")
    if status.progress is not None:
        line.append(f"  {100 * status.progress:.0f} %")
    if status.speed is not None and width >= MEDIUM:
        line.append(f"  {status.speed:.1f}× real time")
    troubles = [
        f"{status.samples_lost} samples lost in {status.gaps} gap{'s' if status.gaps != 1 else ''}" * bool(status.gaps),
        f"overload {100 * status.overload_fraction:.2g} %" * (status.overload_fraction > 0),
        f"{status.late_blocks} blocks late" * bool(status.late_blocks),
    ]
    for trouble in filter(None, troubles):
        line.append(f"  ! {trouble}", style="bold red")
    return line


def spectrum_line(status: ReceiverStatus, width: int, glyphs: Glyphs) -> Text:
    """Power across the capture; the channels' places are underlined."""
    cells = min(width, len(status.spectrum_dbfs))
    edges = np.arange(cells) * len(status.spectrum_dbfs) // cells
    peaks = np.maximum.reduceat(status.spectrum_dbfs, edges)
    line = Text(trend(list(peaks), cells, glyphs), no_wrap=True, overflow="crop")
    for channel in status.channels:
        share = (channel.frequency_hz - status.centre_hz) / status.sample_rate_hz + 0.5
        place = int(share * cells)
        if 0 <= place < cells:
            line.stylize("underline", place, place + 1)
    return line


def channel_table(channels: tuple[ChannelStatus, ...], selected: int, width: int, glyphs: Glyphs) -> Table:
    """A row a channel; what does not fit a narrow screen is left to the strip below."""
    table = Table(box=None, pad_edge=False, padding=(0, 1, 0, 0), width=width, header_style="dim", show_edge=False)
    wide, medium = width >= WIDE, width >= MEDIUM
    widest = width >= WIDEST
    columns: list[tuple[str, int | None, Literal["left", "right"]]] = [("channel", 11 if wide else 10, "left")]
    if medium:
        columns.append(("frequency", 11, "right"))
    columns += [
        ("emission", 10, "left"),
        ("detector" if wide else "det", 9 if wide else 3, "left"),
        ("lock", 7 if wide else 4, "left"),
    ]
    columns += [("SNR", 10 if wide else 8, "left"), ("dB", 3, "right")]
    if medium:
        columns += [("−depth+", 9 if wide else 7, "left"), ("%", 4, "right")]
    columns.append(("offset", 7 if wide else 6, "right"))
    if widest:
        columns.append(("dBFS", 5, "right"))
    if wide:
        columns += [("audio", 5, "left"), ("why", None, "left")]
    for name, column_width, justify in columns:
        table.add_column(
            name,
            width=column_width,
            justify=justify,
            no_wrap=True,
            overflow="ellipsis",
            ratio=None if column_width else 1,
        )
    for place, channel in enumerate(channels):
        cells = _row(channel, width, glyphs)
        table.add_row(*cells, style="reverse" if place == selected else None)
    return table


_SURE = 0.9


def detail_strip(channel: ChannelStatus, width: int, glyphs: Glyphs) -> Group:
    """All there is to say of one channel over the last seconds, six lines."""
    best = channel.recent
    confidence = "as given" if channel.emission_given else f"identified, {100 * channel.emission_confidence:.0f} % sure"
    low_hz, high_hz = channel.audio_hz
    gain = "gain fixed" if channel.gain_db is None else f"gain {channel.gain_db:+.0f} dB"
    levels = ", ".join(
        f"{name} {level:.0f} dBFS" if level > -150 else f"{name} silent"
        for name, level in zip(channel.messages, channel.audio_dbfs, strict=True)
    )
    trend_width = max(8, (width - 50) // 2)
    lines = [
        f"{clean(channel.name)}  {frequency(channel.frequency_hz)}  {channel.emission} ({confidence})  "
        f"audio {low_hz:.0f}–{high_hz:.0f} Hz",
        f"{channel.detector}, {LOCK_WORDS.get(channel.lock, channel.lock)}: {clean(channel.detector_reason)}",
        f"SNR {with_uncertainty(best.snr_db, 'dB')}   C/N0 {with_uncertainty(best.carrier_to_noise_density_dbhz, 'dB-Hz')}"
        f"   level {with_uncertainty(best.level_dbfs, 'dBFS')}",
        f"depth {with_uncertainty(best.depth_percent, '%')} (crest {short(best.depth_positive_percent)}, "
        f"trough {short(best.depth_negative_percent)})   efficiency {with_uncertainty(best.power_efficiency_percent, '%')}",
        f"offset {with_uncertainty(best.carrier_offset_hz, 'Hz')}   "
        f"offset trend {trend(list(channel.offset_trend_hz), trend_width, glyphs)}  "
        f"SNR trend {trend(list(channel.snr_trend_db), trend_width, glyphs)}",
        f"{'open' if channel.open else 'shut'}   {levels}   {gain}",
    ]
    rule = Text(glyphs.tick * width, style="dim", no_wrap=True, overflow="crop")
    return Group(rule, *(Text(line, no_wrap=True, overflow="ellipsis") for line in lines))


def _row(channel: ChannelStatus, width: int, glyphs: Glyphs) -> list[Text]:
    wide, medium = width >= WIDE, width >= MEDIUM
    figures = channel.recent
    snr, rise, fall = figures.snr_db, figures.depth_positive_percent, figures.depth_negative_percent
    over = bool((fall is not None and fall.value > 100.0) or (rise is not None and rise.value > 125.0))
    lock = (LOCK_WORDS if wide else SHORT_LOCK_WORDS).get(channel.lock, channel.lock)
    cells = [Text(clean(channel.name))]
    if medium:
        cells.append(Text(frequency(channel.frequency_hz)))
    unsure = not channel.emission_given and channel.emission_confidence < _SURE
    cells.append(Text(channel.emission + "?" * unsure))
    cells.append(Text(channel.detector if wide else channel.detector[:3]))
    cells.append(Text(lock, style=_STYLES.get(channel.lock, "")))
    cells.append(Text(snr_bar(_value(snr), 10 if wide else 8, glyphs), style="" if channel.open else "dim"))
    cells.append(Text(short(snr)))
    if medium:
        bar = depth_bar(_value(fall), _value(rise), 4 if wide else 3, glyphs)
        cells.append(Text(bar, style="bold red" if over else ""))
        depth = short(figures.depth_percent)
        cells.append(Text(depth + "!" * over, style="bold red" if over else ""))
    cells.append(Text(short(figures.carrier_offset_hz, 1, sign=True)))
    if width >= WIDEST:
        cells.append(Text(short(figures.level_dbfs)))
    if wide:
        loudest = max(channel.audio_dbfs, default=-200.0)
        cells.append(
            Text(f"{loudest:.0f}" if channel.open and loudest > -150 else "shut" if not channel.open else "quiet")
        )
        cells.append(Text(clean(channel.detector_reason)))
    return cells


def _value(reading: Reading | None) -> float | None:
    return None if reading is None else reading.value
