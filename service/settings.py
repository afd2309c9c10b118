"""Settings: environment variables ``TALLYWARD_*``, all checked at start.

The fields of `Settings` are the one table: name, type, default, range and effect of each.
"""

from __future__ import annotations

import dataclasses
import difflib
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, NamedTuple
from urllib.parse import urlsplit

from iso4217 import Currency

PREFIX = "TALLYWARD_"
SHORTEST_KEY = 32
STORE_WAITS = 4  # of a batch: two time-outs for its turn to append, two for an append sent twice


class SettingsError(ValueError):
    """Some settings are wrong; ``faults`` lists all of them, one sentence each."""

    def __init__(self, faults: list[str]) -> None:
        self.faults = faults
        super().__init__("the settings are wrong:\n" + "\n".join(f"  - {f}" for f in faults))


class Setting(NamedTuple):
    """One row of the table of settings."""

    name: str  # of the variable, with prefix
    type: str
    default: str  # as it would be written in the environment; "" for unset
    range: str
    effect: str
    secret: bool


def _number(default: float, low: float, high: float, effect: str, unit: str = "") -> Any:
    return field(
        default=default,
        metadata={"low": low, "high": high, "unit": unit, "effect": effect},
    )


def _text(default: str | None, allowed: str, effect: str, secret: bool = False) -> Any:
    return field(default=default, metadata={"range": allowed, "effect": effect, "secret": secret})


@dataclass(frozen=True, repr=False)
class Settings:
    """What an operator may set; see `table` for all of it in words.

    Raises
    ------
    SettingsError
        If a value is out of its range.
    """

    bind: str = _text(
        "127.0.0.1:8080", "host:port, [IPv6]:port", "Address on which the service listens."
    )
    workers: int = _number(2, 1, 128, "Worker processes; about one for each processor core.")
    max_posting: int = _number(
        2, 1, 64, "Batches that one worker reads, counts and answers at a time."
    )
    threads: int = _number(
        8,
        2,
        256,
        "Other requests that one worker serves at a time; half of them may wait for alarms.",
    )
    max_waiting: int = _number(
        8,
        0,
        64,
        "Batches, and as many other requests, that may wait for their turn in one worker; more "
        "are refused with 503.",
    )
    timeout: int = _number(
        60,
        2,
        600,
        "A worker that shows no sign of life for so long is replaced; at a stop, running requests "
        "get as long to end.",
        "s",
    )
    data: Path = field(
        default=Path(".tallyward"),
        metadata={
            "range": "a folder",
            "effect": "Folder of the embedded store and its generated admin key; not used with "
            "TALLYWARD_REDIS_URL.",
        },
    )
    redis_url: str | None = _text(
        None,
        "redis://, rediss:// or unix://",
        "Address of a Redis or Valkey server; unset, an embedded store is started.",
        secret=True,
    )
    admin_key: str | None = _text(
        None,
        f"at least {SHORTEST_KEY} printable ASCII characters, no spaces",
        "A key with every role in tenant main; unset, the embedded store's service makes one.",
        secret=True,
    )
    currency: str = _text("EUR", "an ISO 4217 code", "Currency of transactions that name none.")
    partitions: int = _number(
        4, 1, 1024, "Parts into which streams are spread; fixed in the store at its first start."
    )
    max_body: int = _number(
        16 * 2**20,
        2**10,
        2**30,
        "Longest request body as it is sent; more is refused with 413.",
        "bytes",
    )
    max_expanded: int = _number(
        64 * 2**20,
        2**10,
        2**32,
        "Longest request body after decompression; at least TALLYWARD_MAX_BODY.",
        "bytes",
    )
    max_rows: int = _number(
        10_000, 1, 50_000, "Most transactions in one request; more are refused with 413."
    )
    max_streams: int = _number(
        10_000, 1, 50_000, "Most streams that one request may touch; more are refused with 413."
    )
    max_full: int = _number(
        500, 1, 10_000, "Most streams of one request with reply=full; more are refused with 413."
    )
    kept_streams: int = _number(
        4096,
        1,
        1_000_000,
        "Streams whose folded state each worker keeps in memory, at most 50 KiB each; a batch that "
        "touches more of them is folded the slow way.",
    )
    horizon_days: int = _number(
        8, 1, 90, "How long a row's id or a request's Idempotency-Key is remembered.", "days"
    )
    max_wait: int = _number(
        30, 0, 30, "Longest time that a request for the alarm feed is held.", "s"
    )
    store_timeout: float = _number(
        5.0,
        0.05,
        300,
        "Longest wait for an answer of the store; then 503.",
        "s",
    )
    queue_timeout: float = _number(
        5.0, 0.05, 300, "Longest wait of a request for its turn; then 503.", "s"
    )
    caller_timeout: float = _number(
        10.0,
        0.05,
        300,
        "Longest wait for a request to come in, its body within so long of its turn, and for its "
        "answer to be taken; then 408, or the caller is hung up on.",
        "s",
    )
    replicas: int = _number(
        0,
        0,
        9,
        "Replicas of the store that must have a batch before it is acknowledged; with too few in "
        "time it is answered with 503.",
    )
    call_rows: int = _number(
        2000,
        100,
        50_000,
        "Most rows that one script in the store takes at a time, so that others get their turn.",
    )
    sweep_seconds: float = _number(
        5.0, 0.05, 300, "Pause between sweeps, which judge rows whose request broke off.", "s"
    )
    log_level: str = _text(
        "info", "debug, info, warning or error", "Least severity of what is logged."
    )

    def __post_init__(self) -> None:
        """Check every value."""
        values = {f.name: getattr(self, f.name) for f in dataclasses.fields(self)}
        if faults := _faults(values):
            raise SettingsError(faults)

    @classmethod
    def from_environment(cls, environment: Mapping[str, str]) -> Settings:
        """Read the settings; an empty variable counts as unset.

        Parameters
        ----------
        environment : mapping
            Usually ``os.environ``; names without the prefix are left alone.

        Returns
        -------
        Settings

        Raises
        ------
        SettingsError
            Lists every fault: unknown names with a near match, unreadable values, values out of
            range. Secrets are never repeated.
        """
        fields = {_variable(f.name): f for f in dataclasses.fields(cls)}
        faults: list[str] = []
        values: dict[str, Any] = {f.name: f.default for f in fields.values()}
        for name, text in environment.items():
            if not name.startswith(PREFIX):
                continue
            if name not in fields:
                faults.append(_unknown(name, list(fields)))
            elif text != "":
                try:
                    values[fields[name].name] = _read(fields[name], text)
                except ValueError:
                    faults.append(f"{name} must be {_kind(fields[name])}, got {text!r}")
        faults += _faults(values)
        if faults:
            raise SettingsError(faults)
        return cls(**values)

    @classmethod
    def table(cls) -> tuple[Setting, ...]:
        """Return every setting in words, for guides.

        Returns
        -------
        tuple of Setting
        """
        return tuple(
            Setting(
                name=_variable(f.name),
                type=_kind(f),
                default=_written(f.default),
                range=_range(f),
                effect=f.metadata["effect"],
                secret=f.metadata.get("secret", False),
            )
            for f in dataclasses.fields(cls)
        )

    def __repr__(self) -> str:
        """Show every value but secrets."""
        shown = (f"{f.name}={_shown(f, getattr(self, f.name))}" for f in dataclasses.fields(self))
        return f"Settings({', '.join(shown)})"

    @property
    def address(self) -> tuple[str, int]:
        """Host and port of `bind`."""
        host, _, port = self.bind.rpartition(":")
        return host.strip("[]"), int(port)


def _variable(name: str) -> str:
    return PREFIX + name.upper()


def _unknown(name: str, known: list[str]) -> str:
    near = difflib.get_close_matches(name.upper(), known, n=1, cutoff=0.7)
    hint = f"did you mean {near[0]}?" if near else "unset it"
    return f"{name} is not a setting: {hint}"


def _kind(setting: dataclasses.Field[Any]) -> str:
    return {"int": "a whole number", "float": "a number", "Path": "a path"}.get(
        str(setting.type), "text"
    )


def _read(setting: dataclasses.Field[Any], text: str) -> Any:
    match str(setting.type):
        case "int":
            if not re.fullmatch(r"[+-]?[0-9]+", text.strip()):  # not 1_000
                raise ValueError(text)
            return int(text)
        case "float":
            return float(text)
        case "Path":
            return Path(text)
        case _:
            return text


def _written(value: Any) -> str:
    return "" if value is None else f"{value:g}" if isinstance(value, float) else str(value)


def _range(setting: dataclasses.Field[Any]) -> str:
    about = setting.metadata
    if "low" not in about:
        return str(about["range"])
    return f"{about['low']} to {about['high']} {about['unit']}".rstrip()


def _shown(setting: dataclasses.Field[Any], value: Any) -> str:
    if not setting.metadata.get("secret") or value is None:
        return repr(value)
    if setting.name == "redis_url":  # it may hold a password, in more places than one
        return repr(f"{urlsplit(value).scheme}://…")
    return "'…'"


def _faults(values: Mapping[str, Any]) -> list[str]:
    """Return one sentence for each value out of its range, without repeating secrets."""
    faults = []
    for setting in dataclasses.fields(Settings):
        value, about = values[setting.name], setting.metadata
        if "low" in about and not about["low"] <= value <= about["high"]:  # refuses NaN too
            faults.append(
                f"{_variable(setting.name)} must be {_range(setting)}, got {_written(value)}"
            )
    for name, fault in (
        ("bind", _bind_fault(values["bind"])),
        ("redis_url", _redis_url_fault(values["redis_url"])),
        ("admin_key", _admin_key_fault(values["admin_key"])),
        ("currency", _currency_fault(values["currency"])),
        ("log_level", _log_level_fault(values["log_level"])),
    ):
        if fault:
            faults.append(f"{_variable(name)} {fault}")
    held = max(
        values["max_wait"],
        values["queue_timeout"]
        + 2 * values["caller_timeout"]
        + STORE_WAITS * values["store_timeout"],
    )
    if not held < values["timeout"]:
        faults.append(
            f"TALLYWARD_TIMEOUT ({_written(values['timeout'])} s) must be more than a request may "
            f"take ({_written(held)} s): TALLYWARD_MAX_WAIT, and TALLYWARD_QUEUE_TIMEOUT + "
            f"2 × TALLYWARD_CALLER_TIMEOUT + {STORE_WAITS} × TALLYWARD_STORE_TIMEOUT"
        )
    if values["max_expanded"] < values["max_body"]:
        faults.append(
            f"TALLYWARD_MAX_EXPANDED ({values['max_expanded']}) must be at least "
            f"TALLYWARD_MAX_BODY ({values['max_body']})"
        )
    return faults


def _bind_fault(bind: str) -> str | None:
    form = re.fullmatch(r"(\[[0-9A-Fa-f:.]+\]|[A-Za-z0-9._-]+):([0-9]{1,5})", bind)
    if form is None or not 1 <= int(form[2]) <= 65535:
        return f"must be host:port with a port of 1 to 65535, got {bind!r}"
    return None


def _redis_url_fault(url: str | None) -> str | None:
    if url is None:
        return None
    if url.startswith("redis+cluster:"):
        return (
            "names a cluster, which is not supported yet: give one server by redis://, rediss:// "
            "or unix://"
        )
    try:
        parts = urlsplit(url)
        _ = parts.port  # raises if it is not a number
    except ValueError:
        return "cannot be read as an address"
    if parts.scheme not in ("redis", "rediss", "unix"):
        return "must begin with redis://, rediss:// or unix://"
    if not (parts.path if parts.scheme == "unix" else parts.hostname):
        return "names no " + ("socket" if parts.scheme == "unix" else "host")
    return None


def _admin_key_fault(key: str | None) -> str | None:
    if key is None or re.fullmatch(rf"[!-~]{{{SHORTEST_KEY},}}", key):
        return None
    if len(key) < SHORTEST_KEY:
        return f"must have at least {SHORTEST_KEY} characters, it has {len(key)}"
    return "must be printable ASCII without spaces"


def _currency_fault(code: str) -> str | None:
    try:
        Currency(code)
    except ValueError:
        return f"must be an ISO 4217 code such as EUR, got {code!r}"
    return None


def _log_level_fault(level: str) -> str | None:
    if level in ("debug", "info", "warning", "error"):
        return None
    return f"must be debug, info, warning or error, got {level!r}"
