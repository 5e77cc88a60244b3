"""Station files: what they can say, and that everything that is wrong is told at once."""

from __future__ import annotations

from contextlib import suppress
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from rxchain.chain.station import MOST_CHANNELS, load_station
from rxchain.errors import RequestError

CONFIGS = Path(__file__).parents[2] / "configs"
SOURCE = '[source]\npath = "x.cu8"\nrate = "2.4MHz"\ncentre = "119.5MHz"\n'


def station(tmp_path, text):
    path = tmp_path / "station.toml"
    path.write_text(text, encoding="utf-8")
    return load_station(path)


@pytest.mark.parametrize("path", sorted(CONFIGS.glob("*.toml")), ids=lambda path: path.name)
def test_shipped_stations_can_be_read(path):
    made = load_station(path)
    assert made.channels
    assert len({channel.name for channel in made.channels}) == len(made.channels)


def test_a_grid_is_a_channel_at_each_step(tmp_path):
    grid = '[[grid]]\nfrom = "119MHz"\nto = "119.1MHz"\nspacing = "8.33kHz"\nemission = "A3E"\naudio = "300-2700Hz"\n'
    made = station(tmp_path, SOURCE + grid)
    frequencies = [channel.frequency_hz for channel in made.channels]
    assert len(frequencies) == 13
    assert frequencies[0] == 119e6
    assert frequencies[-1] == pytest.approx(119.1e6, abs=1.0)
    assert {channel.audio_hz for channel in made.channels} == {(300.0, 2_700.0)}
    assert made.channels[3].name == "119.025MHz"
    assert {channel.spacing for channel in made.channels} == {"8.33kHz"}


def test_a_log_has_rules_and_logs_what_does_not_refuse(tmp_path):
    text = '[log]\nfolder = "log"\nbudget = "2GB"\nkeep_days = 30\n'
    channels = '[[channel]]\nfrequency = "119MHz"\nemission = "A3E"\n'
    channels += '[[channel]]\nfrequency = "119.1MHz"\nemission = "A3E"\nlog = "off"\n'
    made = station(tmp_path, SOURCE + text + channels)
    assert (made.log.folder, made.log.budget_bytes, made.log.keep_days) == (tmp_path / "log", 2_000_000_000, 30.0)
    assert [channel.log for channel in made.channels] == ["transmissions", "off"]


def test_all_faults_are_told_at_once(tmp_path):
    text = (
        '[source]\npath = "x"\nspeed = 3\n[log]\nfolder = "log"\nkeep_days = -1\n[colour]\nred = 1\n'
        '[[channel]]\nfrequency = "soon"\nemission = "A3E"\n[[channel]]\nfrequency = "1MHz"\nemission = "A4E"\n'
        '[[grid]]\nfrom = "1MHz"\nto = "2MHz"\nspacing = "1Hz"\nemission = "A3E"\n'
    )
    with pytest.raises(RequestError) as caught:
        station(tmp_path, text)
    said = str(caught.value)
    for part in (
        "colour: not a table",
        "source.speed=3",
        "log.keep_days=-1",
        "channel 1: frequency=soon",
        "channel 2: emission=A4E",
        f"at most {MOST_CHANNELS}",
    ):
        assert part in said
    assert said.startswith(str(tmp_path / "station.toml"))
    assert "\n" not in said


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "one [source] table"),
        (SOURCE, "at least one [[channel]] or [[grid]]"),
        (SOURCE + "channel = 3\n", "source.channel"),
        ("channel = 3\n" + SOURCE, "must be tables, written [[channel]]"),
        (SOURCE + '[[grid]]\nfrom = "1MHz"\nemission = "A3E"\n', "to is missing"),
        (SOURCE + '[[grid]]\nfrom = "2MHz"\nto = "1MHz"\nspacing = "1kHz"\nemission = "A3E"\n', "from at most to"),
        (
            SOURCE + '[[grid]]\nfrom = "1MHz"\nto = "1MHz"\nspacing = "1kHz"\nemission = "A3E"\nname = "x"\n',
            "follows from the grid",
        ),
        (SOURCE + '[log]\nbudget = "1GB"\n', "names a folder"),
        (SOURCE + '[log]\nfolder = "x"\nbudget = "lots"\n', "log.budget=lots"),
        (SOURCE + '[log]\nfolder = "x"\nsize = 3\n', "log.size=3"),
    ],
)
def test_each_fault_has_its_words(tmp_path, text, says):
    with pytest.raises(RequestError) as caught:
        station(tmp_path, text)
    assert says in str(caught.value)


words = st.text(st.characters(codec="utf-8", exclude_categories=("Cs", "Cc")), max_size=12)
values = st.one_of(words, st.integers(), st.floats(allow_nan=False), st.booleans(), st.lists(words, max_size=2))
KEYS = (
    "path", "receiver", "rate", "frequency", "emission", "name", "audio", "log", "folder", "budget", "from", "to", "spacing",
    "beat", "align", "squelch", "agc", "notch", "vestige", "transmit_response",
)  # fmt: skip
tables = st.dictionaries(st.one_of(st.sampled_from(KEYS), words.filter(bool)), values, max_size=6)


def written(value):
    match value:
        case bool():
            return str(value).lower()
        case str():
            return '"' + value.replace("\\", "\\\\").replace('"', '\\"') + '"'
        case list():
            return "[" + ", ".join(map(written, value)) + "]"
    return repr(value)


@given(source=tables, log=tables, channels=st.lists(tables, max_size=3), grids=st.lists(tables, max_size=2))
@settings(max_examples=80, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_file_is_a_station_or_is_refused(tmp_path, source, log, channels, grids):
    parts = [("[source]", source), ("[log]", log)]
    parts += [("[[channel]]", one) for one in channels] + [("[[grid]]", one) for one in grids]
    text = "\n".join(
        head + "\n" + "\n".join(f"{written(key)} = {written(value)}" for key, value in table.items())
        for head, table in parts
    )
    with suppress(RequestError):
        assert station(tmp_path, text).channels
