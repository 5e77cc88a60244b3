"""``rxchain log``: what was logged: list, show, verify, receive again, export, sign, prune."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rxchain.logbook.listing import Filter

_EPILOG = """\
LOG is the folder of a logbook, as `rxchain receive --log LOG` writes it.

examples:
  rxchain log list LOG --channel harbour --least-snr 10
  rxchain log verify LOG --signed head.json --public-key station.key.pub
  rxchain log receive LOG 12 detector=envelope audio=300-3000Hz
  rxchain log export LOG heard.adi"""
_SUFFIXES = (".csv", ".jsonl", ".adi")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's own commands and their arguments."""
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.epilog = _EPILOG
    actions = parser.add_subparsers(dest="action", metavar="ACTION", required=True, parser_class=type(parser))

    def action(name: str, job: str, log: bool = True) -> argparse.ArgumentParser:
        one = actions.add_parser(name, help=job, description=job[0].upper() + job[1:] + ".", allow_abbrev=False)
        if log:
            one.add_argument("log", metavar="LOG")
        return one

    listing = action("list", "list transmissions")
    _add_filters(listing)
    listing.add_argument("--format", choices=("table", "csv", "jsonl"), default="table")
    show = action("show", "show an entry with everything in it")
    show.add_argument("number", metavar="NUMBER")
    verify = action("verify", "check that no entry and no file was changed, removed or added")
    verify.add_argument("--signed", metavar="FILE", help="a signed head, as `log sign` prints it")
    verify.add_argument("--public-key", metavar="FILE", help="the public key it was signed for")
    again = action("receive", "receive a transmission again from its narrow I/Q; the result is a new entry")
    again.add_argument("number", metavar="NUMBER")
    again.add_argument("keys", metavar="KEY=VALUE", nargs="*", help="keys of a channel, in place of the first ones")
    export = action("export", "write transmissions to a file: .csv, .jsonl or .adi (ADIF)")
    export.add_argument("file", metavar="FILE")
    _add_filters(export)
    mark = action("mark", "add a word to an entry; what is marked is never pruned")
    mark.add_argument("number", metavar="NUMBER")
    mark.add_argument("words", metavar="WORD", nargs="+")
    prune = action("prune", "remove the files of old transmissions; the entries stay, and the chain stays whole")
    prune.add_argument("--budget", metavar="SIZE", help="how much may be left, such as 20GB")
    prune.add_argument("--older-than", metavar="DAYS", help="remove what is older, such as 90")
    action("keygen", "make a key to sign with", log=False).add_argument("key", metavar="KEYFILE")
    sign = action("sign", "sign the head of the chain, and print it")
    sign.add_argument("--key", metavar="KEYFILE", required=True)


def run(arguments: argparse.Namespace) -> int:
    """Does what was asked for; returns the exit status."""
    actions = {
        "list": _list,
        "show": _show,
        "verify": _verify,
        "receive": _receive,
        "export": _export,
        "mark": _mark,
        "prune": _prune,
        "keygen": _keygen,
        "sign": _sign,
    }
    return actions[arguments.action](arguments)


def _add_filters(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--since", metavar="TIME", help="begun at or after, UTC, such as 2031-03-14T05:00")
    parser.add_argument("--until", metavar="TIME", help="begun before")
    parser.add_argument("--channel", metavar="NAME")
    parser.add_argument("--emission", metavar="NAME")
    parser.add_argument("--least-snr", metavar="DB")
    parser.add_argument("--text", metavar="WORD", help="in name, emission, marks or the reason it was cut")


def _filter(arguments: argparse.Namespace) -> Filter:
    from rxchain.logbook.listing import Filter

    snr = arguments.least_snr
    return Filter(
        since=_time(arguments.since, "since"),
        until=_time(arguments.until, "until"),
        channel=arguments.channel,
        emission=arguments.emission,
        least_snr_db=None if snr is None else _number(snr.removesuffix("dB"), "least-snr"),
        text=arguments.text,
    )


def _list(arguments: argparse.Namespace) -> int:
    from rxchain.logbook.listing import as_csv, as_json_lines, rows

    listed = rows(Path(arguments.log), _filter(arguments))
    match arguments.format:
        case "csv":
            print(as_csv(listed), end="")
        case "jsonl":
            for line in as_json_lines(listed):
                print(line)
        case _:
            for line in _table(listed):
                print(line)
    return 0


def _table(listed: list[dict[str, Any]]) -> list[str]:
    from rxchain.cli.main import one_line
    from rxchain.units import format_frequency

    if not listed:
        return ["no transmissions"]
    lines = [
        f"{'no.':>6}  {'start (UTC)':<23}  {'seconds':>8}  {'channel':<16} {'frequency':>14}  {'emission':<12} {'SNR':>6}  "
        "notes"
    ]
    for row in listed:
        start = (row["start"] or "unknown").replace("T", " ").removesuffix("Z")
        snr = "" if row["snr_db"] is None else f"{row['snr_db']:.1f}"
        notes = [f"again from {row['of']}" if row["of"] else "", row["cut"] or "", row["marks"]]
        lines.append(
            f"{row['number']:>6}  {start:<23}  {row['seconds'] or 0:>8.1f}  {one_line(str(row['channel'])):<16} "
            f"{format_frequency(row['frequency_hz']):>14}  {one_line(str(row['emission'])):<12} {snr:>6}  "
            f"{one_line('; '.join(note for note in notes if note))}"
        )
    return lines


def _show(arguments: argparse.Namespace) -> int:
    import json

    from rxchain.logbook.again import entry_of

    entry = entry_of(Path(arguments.log), _whole(arguments.number))
    document = {"number": entry.number, "kind": entry.kind, **entry.body, "digest": entry.digest}
    print(json.dumps(document, indent=2))
    return 0


def _verify(arguments: argparse.Namespace) -> int:
    from rxchain.cli.main import one_line
    from rxchain.errors import SettingError
    from rxchain.logbook.verify import verify

    folder = Path(arguments.log)
    if (arguments.signed is None) != (arguments.public_key is None):
        raise SettingError(
            "signed", arguments.signed, "a signed head is checked with its key", "give --signed and --public-key"
        )
    verdict = verify(folder)
    faults = list(verdict.faults)
    if arguments.signed is not None:
        from rxchain.logbook.signing import check_head

        fault = check_head(folder, Path(arguments.signed), Path(arguments.public_key))
        faults += [fault] if fault else []
    for fault in faults:
        print(one_line(fault))
    if faults:
        return 1
    removed = f", {verdict.removed} removed to make room" if verdict.removed else ""
    print(f"as written: {verdict.entries} entries, {verdict.files} files{removed}; head {verdict.head}")
    return 0


def _receive(arguments: argparse.Namespace) -> int:
    from rxchain.errors import SettingError
    from rxchain.logbook.again import receive_again

    keys: dict[str, str] = {}
    for word in arguments.keys:
        key, equals, value = word.partition("=")
        if not equals or not value or key in ("frequency", "name", "log"):
            raise SettingError("key", word, "must be KEY=VALUE, and none of frequency, name, log")
        keys[key] = value
    entry = receive_again(Path(arguments.log), _whole(arguments.number), keys, _now())
    path = entry.body["files"][0]["path"]
    print(f"entry {entry.number}: {entry.body['emission']} by the {entry.body['detector']} detector, {path}")
    return 0


def _export(arguments: argparse.Namespace) -> int:
    from rxchain.errors import RequestError, SettingError
    from rxchain.logbook.listing import as_adif, as_csv, as_json_lines, rows

    path = Path(arguments.file)
    listed = rows(Path(arguments.log), _filter(arguments))
    match path.suffix.lower():
        case ".csv":
            text = as_csv(listed)
        case ".jsonl":
            text = "".join(line + "\n" for line in as_json_lines(listed))
        case ".adi":
            text = as_adif(listed)
        case _:
            raise SettingError("file", path, "must end in one of " + ", ".join(_SUFFIXES))
    try:
        path.write_text(text, encoding="utf-8", newline="")
    except OSError as error:
        raise RequestError(f"{path}: cannot be written: {error.strerror}") from error
    print(f"{len(listed)} transmissions in {path}")
    return 0


def _mark(arguments: argparse.Namespace) -> int:
    from rxchain.logbook.again import entry_of
    from rxchain.logbook.store import LogStore

    entry_of(Path(arguments.log), _whole(arguments.number))
    body = {"of": _whole(arguments.number), "text": " ".join(arguments.words), "time": _now().isoformat()}
    store = LogStore(Path(arguments.log))
    try:
        entry = store.append("mark", body)
    finally:
        store.close()
    print(f"entry {entry.number}: a word to entry {arguments.number}")
    return 0


def _prune(arguments: argparse.Namespace) -> int:
    from rxchain.errors import SettingError
    from rxchain.logbook.pruning import prune
    from rxchain.logbook.store import LogStore
    from rxchain.units import parse_bytes

    if arguments.budget is None and arguments.older_than is None:
        raise SettingError("prune", "(nothing)", "needs a rule", "give --budget SIZE or --older-than DAYS")
    budget = None if arguments.budget is None else parse_bytes(arguments.budget, "budget")
    days = None if arguments.older_than is None else _number(arguments.older_than.removesuffix("d"), "older-than")
    store = LogStore(Path(arguments.log))
    try:
        done = prune(store, _now(), budget, days)
    finally:
        store.close()
    print(
        f"removed {done.files} files of {done.transmissions} transmissions, {done.bytes} bytes; {done.bytes_left} bytes are left"
    )
    return 0


def _keygen(arguments: argparse.Namespace) -> int:
    from rxchain.logbook.signing import make_key

    public = make_key(Path(arguments.key))
    print(f"private key {arguments.key} (keep it away from the logbook), public key {public}")
    return 0


def _sign(arguments: argparse.Namespace) -> int:
    import json

    from rxchain.logbook.signing import sign_head

    print(json.dumps(sign_head(Path(arguments.log), Path(arguments.key), _now().isoformat()), indent=2))
    return 0


def _time(text: str | None, key: str) -> str | None:
    """As the logbook writes it."""
    import datetime as dt

    from rxchain.errors import SettingError

    if text is None:
        return None
    try:
        time = dt.datetime.fromisoformat(text)
    except ValueError:
        raise SettingError(key, text, "must be a date or time, such as 2031-03-14T05:00") from None
    time = time.replace(tzinfo=dt.UTC) if time.tzinfo is None else time.astimezone(dt.UTC)
    return time.isoformat(timespec="milliseconds").replace("+00:00", "Z")


def _whole(text: str) -> int:
    return int(_number(text, "number", whole=True))


def _number(text: str, key: str, whole: bool = False) -> float:
    from rxchain.errors import SettingError

    try:
        return int(text) if whole else float(text)
    except ValueError:
        raise SettingError(key, text, "must be a whole number" if whole else "must be a number") from None


def _now() -> Any:
    import datetime as dt

    return dt.datetime.now(dt.UTC)
