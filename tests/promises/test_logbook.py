"""The logbook: what was on the air and when, nothing closed is lost, and whatever changes is found."""

from __future__ import annotations

import datetime as dt
import errno
import json
import os
import signal
import sqlite3
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import soundfile
from scenes import SourceInfo, render, station

from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.errors import RequestError
from rxchain.logbook import station_log
from rxchain.logbook.again import receive_again
from rxchain.logbook.clips import Clip, finish_clip
from rxchain.logbook.links import FIRST, canonical, digest
from rxchain.logbook.listing import Filter, as_adif, as_csv, rows
from rxchain.logbook.pruning import prune
from rxchain.logbook.signing import check_head, make_key, sign_head
from rxchain.logbook.station_log import StationLog
from rxchain.logbook.store import DATABASE, LogStore, read_entries
from rxchain.logbook.transmissions import HANG_S, LONGEST_S, TransmissionCutter
from rxchain.logbook.verify import verify
from rxchain.streams import Block
from rxchain.synthesis.scene import Scene

START = dt.datetime(2031, 3, 14, 5, 0, tzinfo=dt.UTC)
NOW = dt.datetime(2031, 3, 15, 12, 0, tzinfo=dt.UTC)
RATE_HZ = 48_000.0
# A noise message has random level where it starts; the edge itself is 5 ms long and the power is taken over 3 ms.
EDGE_S = 0.012
SNR_DB = 1.0
CARRIER_HZ = 0.2


def scene_of(*times, seconds=14.0, name="A3E"):
    """A station that comes on at these times, (start, stop)."""
    stations = tuple(
        replace(station(name, 1e6 - 8e3, offset_hz=7.0, start_s=start, stop_s=stop), name=f"one{k}")
        for k, (start, stop) in enumerate(times)
    )
    other = replace(station("J3E-USB", 1e6 + 6e3, start_s=3.0, stop_s=9.5), name="two")
    return Scene(RATE_HZ, 1e6, seconds, (*stations, other), seed=11, noise_dbfs_hz=-85.0)


TEXTS = ["992kHz A3E name=one log=transmissions agc=off", "1.006MHz J3E-USB name=two log=transmissions"]


def log_scene(folder, rendered, texts=TEXTS, block=4_800, clock=None, until=None, start=START):
    info = SourceInfo("recording", "scene", RATE_HZ, 1e6, start, len(rendered.iq))
    receiver = Receiver(info, tuple(channel_from_text(text) for text in texts))
    ticks = iter(range(10**9))
    log = StationLog(folder, receiver, clock or (lambda: next(ticks) * 0.05), lambda: NOW)
    for k in range(0, until or len(rendered.iq), block):
        receiver.process(Block(rendered.iq[k : k + block], k))
        log.after_block()
    if until is None:
        receiver.flush()
        log.close()
    return log


@pytest.fixture(scope="module")
def rendered():
    return render(scene_of((2.0, 5.5), (8.0, 11.0)))


@pytest.fixture(scope="module")
def logged(rendered, tmp_path_factory):
    folder = tmp_path_factory.mktemp("log") / "log"
    log_scene(folder, rendered)
    return folder


def copy_of(folder, to):
    import shutil

    shutil.copytree(folder, to)
    return to


def seconds_of(text):
    return (dt.datetime.fromisoformat(text) - START).total_seconds()


def test_transmissions_are_entered_with_times_files_and_figures(logged):
    listed = rows(logged)
    found = [(row["channel"], row["start"], row["end"]) for row in listed]
    assert [one[0] for one in found] == ["one", "two", "one"]
    for (_, start, end), times in zip(found, [(2.0, 5.5), (3.0, 9.5), (8.0, 11.0)], strict=True):
        assert seconds_of(start) == pytest.approx(times[0], abs=EDGE_S)
        assert seconds_of(end) == pytest.approx(times[1], abs=EDGE_S)
    first = next(entry.body for entry in read_entries(logged, "transmission"))
    assert first["measured"]["carrier_offset_hz"]["value"] == pytest.approx(7.0, abs=CARRIER_HZ)
    assert first["emission"] == "A3E"
    assert first["cut"] is None
    kinds = [file["kind"] for file in first["files"]]
    assert kinds == ["audio", "iq", "iq description"]
    audio, rate_hz = soundfile.read(logged / first["files"][0]["path"])
    assert len(audio) / rate_hz == pytest.approx(0.5 + 3.5 + 0.3, abs=0.12)  # pre-roll, itself, tail
    assert verify(logged).is_good


def test_figures_of_a_transmission_are_its_own(logged, rendered):
    true_db = [rendered.truths[k].snr_db[0] for k in (0, 2, 1)]
    for row, snr_db in zip(rows(logged), true_db, strict=True):
        assert row["snr_db"] == pytest.approx(snr_db, abs=SNR_DB)


def test_files_and_folders_are_private(logged):
    for path in logged.rglob("*"):
        assert path.stat().st_mode & 0o077 == 0, path


@pytest.mark.parametrize("block", [1_111, 48_000])
def test_the_blocks_make_no_difference(rendered, logged, tmp_path, block):
    log_scene(tmp_path / "log", rendered, block=block)
    ours, theirs = ([one.body for one in read_entries(folder, "transmission")] for folder in (tmp_path / "log", logged))
    assert ours == theirs  # the files' digests are in them


def test_the_chain_is_what_it_says(logged):
    before = FIRST
    for number, entry in enumerate(read_entries(logged), 1):
        assert entry.number == number
        assert entry.digest == digest(before, number, entry.kind, canonical(entry.body))
        before = entry.digest
    assert verify(logged).head == before


def test_every_bit_changed_in_an_entry_is_found(logged, tmp_path):
    rng = np.random.default_rng(3)
    for trial in range(40):
        folder = copy_of(logged, tmp_path / str(trial))
        database = sqlite3.connect(folder / DATABASE)
        entries = database.execute("SELECT number, kind, body, digest FROM entry").fetchall()
        number, *texts = entries[rng.integers(len(entries))]
        column = int(rng.integers(3))
        data = bytearray(texts[column].encode())
        place = int(rng.integers(len(data)))
        data[place] ^= 1 << int(rng.integers(7))
        with database:
            database.execute(
                f"UPDATE entry SET {('kind', 'body', 'digest')[column]} = CAST(? AS TEXT) WHERE number = ?",
                (bytes(data), number),
            )
        database.close()
        faults = verify(folder, check_files=False).faults
        assert faults
        assert faults[0].startswith((f"entry {number}:", f"entry {number + 1}:")) or number == len(entries)


def test_every_bit_changed_in_a_file_is_found(logged, tmp_path):
    rng = np.random.default_rng(4)
    folder = copy_of(logged, tmp_path / "log")
    files = sorted((folder / "clips").rglob("*.*"))
    for _ in range(40):
        path = files[rng.integers(len(files))]
        data = bytearray(path.read_bytes())
        place, bit = int(rng.integers(len(data))), 1 << int(rng.integers(8))
        data[place] ^= bit
        path.write_bytes(data)
        assert verify(folder).faults == (f"{path.relative_to(folder)}: changed since {entry_with(folder, path)}",)
        data[place] ^= bit
        path.write_bytes(data)
    assert verify(folder).is_good


def entry_with(folder, path):
    name = str(path.relative_to(folder))
    return next(f"entry {one.number}" for one in read_entries(folder) if name in one.text)


def test_missing_and_added_are_named(logged, tmp_path):
    folder = copy_of(logged, tmp_path / "log")
    gone = next((folder / "clips").rglob("*.flac"))
    gone.unlink()
    (folder / "clips" / "extra.flac").write_bytes(b"x")
    said = verify(folder).faults
    assert f"{gone.relative_to(folder)}: missing; {entry_with(folder, gone)} has it" in said
    assert "clips/extra.flac: added; no entry has it" in said
    with sqlite3.connect(folder / DATABASE) as database:
        database.execute("DELETE FROM entry WHERE number = 2")
    assert verify(folder).faults[0] == "entry 2: missing; the next one is 3"


def test_a_signed_head_shows_a_shortened_log(logged, tmp_path):
    folder, key = copy_of(logged, tmp_path / "log"), tmp_path / "station.key"
    public = make_key(key)
    assert key.stat().st_mode & 0o077 == 0
    signed = tmp_path / "head.json"
    signed.write_text(json.dumps(sign_head(folder, key, NOW.isoformat())))
    assert check_head(folder, signed, public) == ""
    forged = tmp_path / "forged.json"
    forged.write_text(signed.read_text().replace('"entries": 5', '"entries": 4'))
    assert "not signed with the key" in check_head(folder, forged, public)
    with sqlite3.connect(folder / DATABASE) as database:
        database.execute("DELETE FROM entry WHERE number = (SELECT max(number) FROM entry)")
    assert verify(folder, check_files=False).is_good  # the chain alone cannot tell
    assert "no longer in" in check_head(folder, signed, public)
    make_key(folder / "inside.key")
    with pytest.raises(RequestError, match="must not lie in the logbook"):
        sign_head(folder, folder / "inside.key", NOW.isoformat())


def test_two_runs_do_not_write_one_log(tmp_path):
    first = LogStore(tmp_path / "log")
    with pytest.raises(RequestError, match="another run is writing"):
        LogStore(tmp_path / "log")
    first.close()
    LogStore(tmp_path / "log").close()


def test_readers_read_while_it_is_written(tmp_path):
    store = LogStore(tmp_path / "log")
    for k in range(3):
        store.append("event", {"k": k})
        assert [entry.body["k"] for entry in read_entries(tmp_path / "log")] == list(range(k + 1))
    store.close()


def test_a_clock_set_back_reorders_nothing(tmp_path):
    store = LogStore(tmp_path / "log")
    for hour in (5, 6, 4):
        store.append("event", {"time": f"2031-03-14T0{hour}:00:00Z"})
    store.close()
    assert [entry.body["time"][12] for entry in read_entries(tmp_path / "log")] == ["5", "6", "4"]
    assert verify(tmp_path / "log").is_good


def test_an_unreadable_database_is_said(tmp_path):
    (tmp_path / DATABASE).write_bytes(b"no database at all, " * 300)
    with pytest.raises(RequestError, match="cannot be used"):
        LogStore(tmp_path)
    with pytest.raises(RequestError, match="not readable"):
        list(read_entries(tmp_path))


def test_what_a_broken_run_left_is_closed_by_the_next(rendered, tmp_path):
    folder = tmp_path / "log"
    log = log_scene(folder, rendered, until=int(4.0 * RATE_HZ), clock=iter(range(10**9)).__next__)
    assert list((folder / "unfinished").iterdir())
    log._store.close()  # as the end of the process would
    log_scene(folder, rendered)
    entries = [entry.body for entry in read_entries(folder, "transmission")]
    broken = [body for body in entries if body["cut"] == "the run broke off"]
    assert sorted(body["channel"] for body in broken) == ["one", "two"]
    assert all(body["seconds"] > 0.9 for body in broken)
    assert not list((folder / "unfinished").iterdir())
    assert verify(folder).is_good
    assert len(entries) == 2 + 3


_WRITER = """
import sys
from pathlib import Path
from rxchain.logbook.clips import Clip, finish_clip
from rxchain.logbook.station_log import _recover
from rxchain.logbook.store import LogStore
import numpy as np
store = LogStore(Path(sys.argv[1]))
_recover(store)
k = store.number
while True:
    key = f"x-{k:06d}"
    about = {"name": "x", "day": "2031-03-14", "audio_rate_hz": 8000.0, "iq_rate_hz": 8000.0, "messages": 1,
             "frequency_hz": 1e6, "emission": "A3E", "start": None}
    store.begin(key, about)
    clip = Clip(store.folder, key, 1)
    for _ in range(3):
        clip.write_audio(np.zeros((1, 800), np.float32)); clip.write_iq(np.zeros(800, np.complex64)); clip.sync()
    clip.close()
    entry = store.append("transmission", {"channel": "x", "files": finish_clip(store.folder, key, about)}, key)
    print(entry.number, flush=True)
    k += 1
"""


def test_no_entry_is_lost_by_a_kill(tmp_path):
    """A small form of the table in benchmarks: killed at random moments, everything that was said to be closed is there."""
    folder, rng = tmp_path / "log", np.random.default_rng(5)
    for _ in range(4):
        process = subprocess.Popen([sys.executable, "-c", _WRITER, str(folder)], stdout=subprocess.PIPE, text=True)
        said = [int(process.stdout.readline()) for _ in range(int(rng.integers(2, 6)))]
        os.kill(process.pid, signal.SIGKILL)
        said += [int(line) for line in process.stdout.read().split()]
        process.wait()
        process.stdout.close()
        assert {entry.number for entry in read_entries(folder)} >= set(said)
    store = LogStore(folder)
    station_log._recover(store)
    store.close()
    assert verify(folder).is_good


def test_a_full_disk_stops_the_audio_and_not_the_entries(rendered, tmp_path, monkeypatch):
    """Writing fails for a while: what was on is entered as cut by it, and writing goes on when there is room again."""
    full = {"now": False}

    def write(self, audio):
        if full["now"]:
            raise OSError(errno.ENOSPC, "No space left on device")
        plain(self, audio)

    plain = Clip.write_audio
    monkeypatch.setattr(Clip, "write_audio", write)
    folder = tmp_path / "log"
    info = SourceInfo("recording", "scene", RATE_HZ, 1e6, START, len(rendered.iq))
    receiver = Receiver(info, tuple(channel_from_text(text) for text in TEXTS))
    seconds = {"now": 0.0}
    log = StationLog(folder, receiver, lambda: seconds["now"] * 10, lambda: NOW)
    for k in range(0, len(rendered.iq), 4_800):
        seconds["now"] = k / RATE_HZ
        full["now"] = 4.0 <= seconds["now"] < 6.0
        receiver.process(Block(rendered.iq[k : k + 4_800], k))
        log.after_block()
    receiver.flush()
    log.close()
    entries = list(read_entries(folder))
    words = [entry.body.get("event") for entry in entries]
    assert "not writable" in words
    assert "writing again" in words
    cuts = {(entry.body["channel"], entry.body["cut"]) for entry in entries if entry.kind == "transmission"}
    assert cuts == {("one", "disk full"), ("two", "disk full"), ("one", None)}
    assert verify(folder).is_good


def test_received_again_from_its_own_samples(logged, tmp_path):
    folder = copy_of(logged, tmp_path / "log")
    entry = receive_again(folder, 2, {"detector": "envelope", "agc": "off"}, NOW)
    assert entry.body["of"] == 2
    assert entry.body["detector"] == "envelope"
    assert rows(folder)[-1]["of"] == 2
    first = next(read_entries(folder, "transmission"))
    assert entry.body["measured"]["snr_db"]["value"] == pytest.approx(
        first.body["measured"]["snr_db"]["value"], abs=SNR_DB
    )
    assert verify(folder).is_good
    with pytest.raises(RequestError, match="no I/Q"):
        receive_again(folder, 1, {}, NOW)


def test_pruning_keeps_what_is_marked_and_the_chain(logged, tmp_path):
    folder = copy_of(logged, tmp_path / "log")
    store = LogStore(folder)
    marked = rows(folder)[0]
    store.append("mark", {"of": marked["number"], "text": "keep"})
    done = prune(store, NOW, budget_bytes=0, oldest_days=None)
    store.close()
    assert done.transmissions == 2
    assert (folder / marked["audio"]).exists()
    assert len(list((folder / "clips").rglob("*.flac"))) == 1
    assert verify(folder).is_good
    assert len(rows(folder)) == 3  # every transmission is still known


def test_old_files_go_by_age(logged, tmp_path):
    folder = copy_of(logged, tmp_path / "log")
    store = LogStore(folder)
    assert prune(store, NOW, None, oldest_days=3.0).transmissions == 0
    assert prune(store, NOW + dt.timedelta(days=3), None, oldest_days=3.0).transmissions == 3
    store.close()


@pytest.mark.parametrize(
    ("wanted", "numbers"),
    [
        (Filter(channel="two"), [3]),
        (Filter(since="2031-03-14T05:00:07"), [4]),
        (Filter(until="2031-03-14T05:00:02.5"), [2]),
        (Filter(emission="A3E", least_snr_db=-20.0), [2, 4]),
        (Filter(least_snr_db=90.0), []),
        (Filter(text="j3e"), [3]),
    ],
)
def test_filters(logged, wanted, numbers):
    assert [row["number"] for row in rows(logged, wanted)] == numbers


def test_a_name_is_no_formula_and_no_field():
    row = dict.fromkeys(rows.__globals__["COLUMNS"]) | {
        "number": 1, "channel": "=HYPERLINK(1)", "frequency_hz": 1e6, "emission": "J3E-USB", "marks": "a<EOR>\nb", "start": None,
        "end": None,
    }  # fmt: skip
    assert ",'=HYPERLINK(1)," in as_csv([row])
    text = as_adif([row])
    assert text.count("\n") == 6  # five lines of a head, one of a record
    length, comment = text.split("<COMMENT:")[1].split(">", 1)
    assert comment[: int(length)] == "=HYPERLINK(1): J3E-USB; a<EOR>?b"  # its length says where it ends


def test_hours_of_continuous_audio(rendered, tmp_path):
    start = dt.datetime(2031, 3, 14, 5, 59, 55, tzinfo=dt.UTC)
    log_scene(tmp_path / "log", rendered, texts=["992kHz A3E name=one log=all"], start=start)
    entries = [entry.body for entry in read_entries(tmp_path / "log", "transmission")]
    assert [(body["what"], body["seconds"]) for body in entries] == [("hour", 5.0), ("hour", 9.0)]
    assert [body["end"][11:19] for body in entries] == ["06:00:00", "06:00:09"]
    lengths = [soundfile.info(tmp_path / "log" / body["files"][0]["path"]).duration for body in entries]
    assert lengths == [5.0, 9.0]


def test_long_ones_are_cut_and_short_ones_are_none():
    step_s = 0.02
    cutter = TransmissionCutter(step_s)
    steps = np.zeros(int(2 * LONGEST_S / step_s), bool)
    steps[100 : 100 + int((LONGEST_S + 30.0 + HANG_S) / step_s)] = True
    spans = cutter.take(steps)
    assert [span.is_cut for span in spans] == [True, False]
    assert spans[0].end_s - spans[0].begin_s == pytest.approx(LONGEST_S)
    assert spans[1].begin_s == spans[0].end_s
    assert spans[1].end_s - spans[1].begin_s == pytest.approx(30.0)
    short = cutter.take(np.array([True] * int((HANG_S + 0.2) / step_s) + [False]))
    assert [span.is_worth_keeping for span in short] == [False]


def test_a_clip_is_audio_and_a_recording(tmp_path):
    LogStore(tmp_path).close()
    clip = Clip(tmp_path, "x", 2)
    clip.write_audio(np.array([[0.5, 2.0], [-0.5, -0.25]], np.float32))
    clip.write_iq(np.array([1j, 0.5], np.complex64))
    clip.close()
    about = {
        "name": "x",
        "day": "2031-03-14",
        "audio_rate_hz": 8e3,
        "iq_rate_hz": 12e3,
        "messages": 2,
        "frequency_hz": 1e6,
        "emission": "B8E",
    }
    files = finish_clip(tmp_path, "x", about)
    assert files[0]["clipped"] == 1
    audio, _ = soundfile.read(tmp_path / files[0]["path"])
    assert audio == pytest.approx(np.array([[0.5, -0.5], [1.0, -0.25]]), abs=1e-6)
    assert np.fromfile(tmp_path / files[1]["path"], np.complex64) == pytest.approx([1j, 0.5])
    assert Path(files[2]["path"]).suffix == ".sigmf-meta"
