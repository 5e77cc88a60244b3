"""``rxchain log`` as its user meets it, from a run that logs to what can be asked of the log."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from rxchain.chain.channel_settings import channel_from_text
from rxchain.cli.main import main
from rxchain.errors import SettingError

COAST = Path(__file__).parents[2] / "recordings" / "coast.sigmf-meta"


@pytest.fixture(scope="module")
def log(tmp_path_factory):
    folder = tmp_path_factory.mktemp("run")
    station = folder / "station.toml"
    station.write_text(
        f'[source]\npath = "{COAST}"\n[log]\nfolder = "log"\n'
        '[[channel]]\nfrequency = "2.721MHz"\nemission = "A3E"\nname = "harbour"\n'
        '[[channel]]\nfrequency = "2.712MHz"\nemission = "J3E-LSB"\nname = "net"\n'
        '[[channel]]\nfrequency = "2.708MHz"\nemission = "A1A"\nname = "beacon"\nlog = "off"\n'
    )
    assert main(["receive", str(station), "--quiet"]) == 0
    return folder / "log"


def said(capsys, *words, status=0):
    assert main(["log", *map(str, words)]) == status
    return capsys.readouterr().out


def test_a_station_with_a_log_logs_its_channels(log, capsys):
    table = said(capsys, "list", log)
    assert "harbour" in table
    assert "net" in table
    assert "beacon" not in table
    lines = said(capsys, "list", log, "--format", "jsonl", "--channel", "net").splitlines()
    assert [json.loads(line)["emission"] for line in lines] == ["J3E-LSB"]
    assert said(capsys, "list", log, "--text", "nobody") == "no transmissions\n"


def test_show_verify_export_mark_prune(log, tmp_path, capsys):
    assert json.loads(said(capsys, "show", log, "2"))["kind"] == "transmission"
    assert said(capsys, "verify", log).startswith("as written: ")
    for suffix in (".csv", ".jsonl", ".adi"):
        assert "2 transmissions" in said(capsys, "export", log, tmp_path / f"x{suffix}")
    assert "again" not in said(capsys, "list", log)
    assert "envelope" in said(capsys, "receive", log, "2", "detector=envelope")
    assert "a word to entry 2" in said(capsys, "mark", log, "2", "strong", "signal")
    assert "strong signal" in said(capsys, "list", log)
    assert "removed" in said(capsys, "prune", log, "--budget", "0B")
    assert "removed to make room" in said(capsys, "verify", log)


def test_signing(log, tmp_path, capsys):
    key, head = tmp_path / "key", tmp_path / "head.json"
    said(capsys, "keygen", key)
    head.write_text(said(capsys, "sign", log, "--key", key))
    said(capsys, "verify", log, "--signed", head, "--public-key", f"{key}.pub")
    said(capsys, "keygen", tmp_path / "other")
    out = said(capsys, "verify", log, "--signed", head, "--public-key", tmp_path / "other.pub", status=1)
    assert "not signed with the key" in out


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["list", "nowhere"], "no logbook here"),
        (["show", "{log}", "99"], "no entry 99"),
        (["show", "{log}", "one"], "must be a whole number"),
        (["list", "{log}", "--since", "yesterday"], "must be a date or time"),
        (["export", "{log}", "x.pdf"], "must end in one of .csv, .jsonl, .adi"),
        (["receive", "{log}", "2", "frequency=1MHz"], "none of frequency, name, log"),
        (["receive", "{log}", "2", "detector=ears"], "detector=ears"),
        (["prune", "{log}"], "give --budget SIZE or --older-than DAYS"),
        (["prune", "{log}", "--budget", "much"], "budget=much"),
        (["verify", "{log}", "--signed", "x"], "give --signed and --public-key"),
        (["sign", "{log}", "--key", "nowhere"], "not a readable private key"),
    ],
)
def test_bad_requests_are_one_line(log, capsys, words, says):
    assert main(["log", *(word.format(log=log) for word in words)]) == 2
    line = capsys.readouterr().err
    assert says in line
    assert line.count("\n") == 1


@pytest.mark.parametrize(
    ("options", "says"),
    [
        (["--channel", "2.721MHz A3E log=transmissions"], "add --log DIR or --out DIR"),
        (["--channel", "2.721MHz A3E", "--log", "x"], "no channel is logged"),
        (["--channel", "2.721MHz A3E log=some", "--log", "x"], "log=some"),
    ],
)
def test_requests_that_cannot_be_logged(capsys, options, says):
    assert main(["receive", str(COAST), *options, "--quiet"]) == 2
    assert says in capsys.readouterr().err


def test_without_a_squelch_nothing_tells_transmissions_apart():
    with pytest.raises(SettingError, match="needs a squelch"):
        channel_from_text("1MHz A3E squelch=off log=transmissions")
    assert channel_from_text("1MHz A3E squelch=off log=all").log == "all"


def test_a_changed_file_is_named_and_the_status_says_so(log, capsys, tmp_path):
    import shutil

    folder = tmp_path / "log"
    shutil.copytree(log, folder)
    meta = next((folder / "clips").rglob("*.sigmf-meta"), None)
    if meta is None:  # another test has made room
        meta = next((folder / "clips").rglob("*.flac"))
    meta.write_bytes(meta.read_bytes() + b" ")
    assert main(["log", "verify", str(folder)]) == 1
    assert f"{meta.name}: changed since entry" in capsys.readouterr().out
