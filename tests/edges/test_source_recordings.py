"""Recordings as they come: every format, gaps, broken and hostile files."""

import json
import wave

import numpy as np
import pytest
import soundfile
from hypothesis import given, settings
from hypothesis import strategies as st

from rxchain.errors import RequestError, SourceLost
from rxchain.sources.opening import open_source
from rxchain.sources.raw_recording import RawRecording
from rxchain.sources.sigmf_recording import SigmfRecording
from rxchain.sources.wave_recording import WaveRecording

N = 5_000
RAMP = (np.linspace(-0.9, 0.9, N) + 1j * np.linspace(0.8, -0.8, N)).astype(np.complex64)


def write_sigmf(folder, data, captures=None, **global_changes):
    meta = {
        "global": {"core:datatype": "cf32_le", "core:sample_rate": 1_000.0, "core:version": "1.0.0", **global_changes},
        "captures": captures or [{"core:sample_start": 0, "core:frequency": 1e6}],
        "annotations": [],
    }
    (folder / "r.sigmf-data").write_bytes(data)
    (folder / "r.sigmf-meta").write_text(json.dumps(meta))
    return folder / "r.sigmf-meta"


def read(source):
    blocks = list(source.blocks())
    return np.concatenate([block.iq for block in blocks]), blocks


@given(block=st.integers(1, 6_000))
@settings(max_examples=20, deadline=None)
def test_any_block_length_gives_the_same_samples(tmp_path_factory, block):
    folder = tmp_path_factory.mktemp("raw")
    (folder / "r.cf32").write_bytes(RAMP.tobytes())
    iq, blocks = read(RawRecording(folder / "r.cf32", 1_000.0, 0.0, block_samples=block))
    np.testing.assert_array_equal(iq, RAMP)
    assert [one.index for one in blocks] == list(range(0, N, block))
    assert all(one.iq.dtype == np.complex64 for one in blocks)


@pytest.mark.parametrize(
    ("suffix", "dtype", "scale", "middle"),
    [(".cu8", "u1", 127.5, 127.5), (".cs8", "i1", 128, 0), (".cs16", "<i2", 32_768, 0)],
)
def test_raw_formats(tmp_path, suffix, dtype, scale, middle):
    components = np.rint(RAMP.view(np.float32) * scale + middle).astype(dtype)
    path = tmp_path / f"r{suffix}"
    path.write_bytes(components.tobytes())
    iq, blocks = read(open_source(str(path), rate_hz=48_000.0, centre_hz=1e6))
    assert np.max(np.abs(iq - RAMP)) < 1.0 / scale
    assert sum(block.overloaded for block in blocks) == 0


def test_samples_at_the_rails_are_counted(tmp_path):
    components = np.full(200, 128, "u1")
    components[[10, 21, 22, 23]] = [0, 255, 255, 255]
    (tmp_path / "r.cu8").write_bytes(components.tobytes())
    _, blocks = read(open_source(str(tmp_path / "r.cu8"), rate_hz=48_000.0, centre_hz=1e6))
    assert blocks[0].overloaded == 3


def test_numbers_that_are_none_do_not_poison_the_stream(tmp_path):
    iq = RAMP.copy()
    iq[7] = np.nan + 1j
    iq[9] = np.inf
    (tmp_path / "r.cf32").write_bytes(iq.tobytes())
    got, blocks = read(open_source(str(tmp_path / "r.cf32"), rate_hz=48_000.0, centre_hz=1e6))
    assert np.isfinite(got).all()
    assert sum(block.overloaded for block in blocks) == 2


@pytest.mark.parametrize("capture", [{"core:global_index": 3_000}, {"core:datetime": "2031-03-14T05:00:03Z"}])
def test_a_gap_between_captures_is_reported_and_counted_in_the_index(tmp_path, capture):
    first = {
        "core:sample_start": 0,
        "core:frequency": 1e6,
        "core:datetime": "2031-03-14T05:00:00Z",
        "core:global_index": 0,
    }
    if "core:datetime" in capture:
        del first["core:global_index"]
    second = {"core:sample_start": 2_000, "core:frequency": 1e6, **capture}
    source = SigmfRecording(write_sigmf(tmp_path, RAMP.tobytes(), [first, second]), block_samples=700)
    iq, blocks = read(source)
    np.testing.assert_array_equal(iq, RAMP)
    assert source.info.n_samples == N + 1_000
    lost = [(block.index, block.samples_lost) for block in blocks if block.samples_lost]
    assert lost == [(3_000, 1_000)]


def test_captures_at_different_frequencies_are_a_choice(tmp_path):
    captures = [
        {"core:sample_start": 0, "core:frequency": 1e6},
        {"core:sample_start": 2_000, "core:frequency": 2e6},
    ]
    path = write_sigmf(tmp_path, RAMP.tobytes(), captures)
    with pytest.raises(RequestError, match=r"different frequencies \(0: 1MHz, 1: 2MHz\); choose one with --capture N"):
        SigmfRecording(path)
    source = SigmfRecording(path, capture=1)
    iq, _ = read(source)
    np.testing.assert_array_equal(iq, RAMP[2_000:])
    assert source.info.centre_hz == 2e6


def test_archive_and_data_name(tmp_path):
    import tarfile

    meta = write_sigmf(tmp_path, RAMP.tobytes())
    with tarfile.open(tmp_path / "r.sigmf", "w") as archive:
        for name in ("r.sigmf-meta", "r.sigmf-data"):
            archive.add(tmp_path / name, arcname=f"r/{name}")
    for path in (tmp_path / "r.sigmf", meta.with_suffix(".sigmf-data")):
        iq, _ = read(SigmfRecording(path))
        np.testing.assert_array_equal(iq, RAMP)


@pytest.mark.parametrize(
    ("changes", "rule"),
    [
        ({"core:datatype": "cf32_be"}, "not served; one of cf32_le, ci16_le, ci8, cu8 is"),
        ({"core:datatype": "rf32_le"}, "not served"),
        ({"core:sample_rate": -5}, ""),
        ({"core:sample_rate": "fast"}, ""),
        ({"core:num_channels": 2}, "one channel is served"),
        ({"core:dataset": "../../etc/passwd"}, "must name a file in the same folder"),
        ({"core:dataset": "elsewhere.bin"}, "no such file"),
    ],
)
def test_metadata_that_cannot_be_served(tmp_path, changes, rule):
    path = write_sigmf(tmp_path, RAMP.tobytes(), **changes)
    with pytest.raises(RequestError) as error:
        SigmfRecording(path)
    assert rule in str(error.value)
    assert "\n" not in str(error.value)


@pytest.mark.parametrize(
    "text", ["", "{", "[]", '{"global": {}}', '{"global": 1, "captures": [], "annotations": []}', "[" * 9_000]
)
def test_metadata_that_is_none(tmp_path, text):
    path = write_sigmf(tmp_path, RAMP.tobytes())
    path.write_text(text)
    with pytest.raises(RequestError):
        SigmfRecording(path)


def test_names_from_files_cannot_steer_a_terminal(tmp_path):
    path = write_sigmf(tmp_path, RAMP.tobytes(), **{"core:datatype": "cf\x1b[2J32"})
    with pytest.raises(RequestError) as error:
        SigmfRecording(path)
    assert "\x1b" not in str(error.value)


@pytest.mark.parametrize("n_bytes", [0, 5])
def test_data_of_no_whole_sample(tmp_path, n_bytes):
    with pytest.raises(RequestError, match="holds no samples"):
        SigmfRecording(write_sigmf(tmp_path, b"\0" * n_bytes))


def test_a_file_that_shrinks_while_it_is_read_is_lost_after_what_was_there(tmp_path):
    path = tmp_path / "r.cf32"
    path.write_bytes(RAMP.tobytes())
    blocks = RawRecording(path, 1_000.0, 0.0, block_samples=1_000).blocks()
    first = next(blocks)
    path.write_bytes(RAMP[:1_500].tobytes())
    got = [first]
    with pytest.raises(SourceLost, match="samples early"):
        got.extend(blocks)
    assert sum(len(block.iq) for block in got) >= 1_000


@pytest.mark.parametrize(
    ("name", "subtype", "step"), [("r.wav", "PCM_16", 1 / 32_768), ("r.wav", "PCM_24", 1e-6), ("r.flac", "PCM_24", 1e-6),
                                  ("r.wav", "FLOAT", 1e-7)]
)  # fmt: skip
def test_sound_files(tmp_path, name, subtype, step):
    soundfile.write(tmp_path / name, RAMP.view(np.float32).reshape(-1, 2), 48_000, subtype=subtype)
    source = open_source(str(tmp_path / name), centre_hz=7e6)
    iq, blocks = read(source)
    assert np.max(np.abs(iq - RAMP)) < 2 * step
    assert source.info.sample_rate_hz == 48_000.0
    assert sum(block.overloaded for block in blocks) == 0


def test_rf64(tmp_path):
    soundfile.write(tmp_path / "r.rf64", RAMP.view(np.float32).reshape(-1, 2), 96_000, subtype="FLOAT", format="RF64")
    iq, _ = read(WaveRecording(tmp_path / "r.rf64", None, 0.0))
    np.testing.assert_array_equal(iq, RAMP)


def test_one_channel_is_no_iq(tmp_path):
    with wave.open(str(tmp_path / "r.wav"), "wb") as file:
        file.setnchannels(1)
        file.setsampwidth(2)
        file.setframerate(8_000)
        file.writeframes(b"\0\0" * 100)
    with pytest.raises(RequestError, match="I left and Q right"):
        WaveRecording(tmp_path / "r.wav", None, 0.0)


def test_something_else_named_like_a_sound_file(tmp_path):
    (tmp_path / "r.wav").write_bytes(b"not a sound file at all")
    with pytest.raises(RequestError, match="not a sound file"):
        WaveRecording(tmp_path / "r.wav", None, 0.0)
