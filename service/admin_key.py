"""The admin key of a service that runs on its own embedded store: made once, kept in a file."""

from __future__ import annotations

import contextlib
import os
import re
import secrets
from pathlib import Path

from service.settings import SHORTEST_KEY
from service.store.errors import StoreError

FILE = "admin-key"


def key_file(data: Path) -> Path:
    """Return where the key of the data folder is kept."""
    return data.absolute() / FILE


def kept_key(data: Path) -> str | None:
    """Return the key kept in the data folder, None if there is none.

    Raises
    ------
    StoreError
        If the file cannot be read or holds no usable key.
    """
    path = key_file(data)
    try:
        key = path.read_text(encoding="utf-8").strip()
    except FileNotFoundError:
        return None
    except (OSError, UnicodeDecodeError) as error:
        raise StoreError(f"cannot read the admin key in {path}: {error}") from error
    if not re.fullmatch(rf"[!-~]{{{SHORTEST_KEY},}}", key):
        raise StoreError(
            f"{path} holds no usable key (at least {SHORTEST_KEY} printable characters): delete it "
            "to have another made, or set TALLYWARD_ADMIN_KEY"
        )
    return key


def keep_a_key(data: Path) -> str:
    """Return the key kept in the data folder; if there is none, make one that only we can read.

    Parameters
    ----------
    data : Path
        An existing folder of which this process holds the lock.

    Raises
    ------
    StoreError
        As `kept_key`, or if the file cannot be written.
    """
    if (key := kept_key(data)) is not None:
        return key
    key = secrets.token_urlsafe(32)
    path, draft = key_file(data), key_file(data).with_suffix(".draft")
    try:
        with contextlib.suppress(FileNotFoundError):
            draft.unlink()
        with os.fdopen(os.open(draft, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o600), "w") as file:
            file.write(key + "\n")
            file.flush()
            os.fsync(file.fileno())
        draft.rename(path)  # never half a key
    except OSError as error:
        raise StoreError(f"cannot write the admin key to {path}: {error}") from error
    return key
