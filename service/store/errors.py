"""What went wrong in the store, and whether a write may have happened nevertheless."""

from __future__ import annotations

import re

import redis.exceptions as client


class StoreError(Exception):
    """The store cannot be used; ``args[0]`` says why and what to do."""


_REFUSALS = frozenset(
    {
        "MOVED",  # another node has the slot
        "ASK",
        "TRYAGAIN",
        "CLUSTERDOWN",
        "CROSSSLOT",
        "READONLY",  # a replica
        "MASTERDOWN",
        "LOADING",  # reading its file
        "BUSY",  # a script runs too long
        "MISCONF",  # cannot persist
        "NOREPLICAS",
        "OOM",  # at a script's start, or at a single command: nothing was written
        "NOSCRIPT",
        "NOAUTH",
        "NOPERM",
        "WRONGPASS",
        "EXECABORT",
        "STRANGER",  # ours: the partition belongs to another store than the caller thinks
    }
)
_RAISED_IN_SCRIPT = " script: "  # such an error ends in "script: <sha1>, on @user_script:1."
_CODE = re.compile(r"[A-Z]+(?![A-Za-z])")

_REFUSAL_CLASSES: tuple[type[BaseException], ...] = (
    client.MovedError,
    client.AskError,
    client.TryAgainError,
    client.ClusterDownError,
    client.ClusterCrossSlotError,
    client.ReadOnlyError,
    client.MasterDownError,
    client.BusyLoadingError,
    client.OutOfMemoryError,
    client.NoScriptError,
    client.NoPermissionError,
    client.AuthenticationError,
    client.AuthenticationWrongNumberOfArgsError,
    client.ExecAbortError,
)


class NotSent(client.ConnectionError):
    """No connection could be made, so nothing was sent."""


def surely_not_applied(exc: BaseException) -> bool:
    """Tell whether the command that failed surely changed nothing in the store.

    True for refusals that a server gives before it runs anything, and where no connection was
    made. False means *unknown*: a time-out or a reset may come after the write, and an error out
    of the middle of a script is not rolled back.

    Parameters
    ----------
    exc : BaseException
        What the client raised, or an error value from a pipeline's reply list.

    Returns
    -------
    bool
    """
    if isinstance(exc, (NotSent, ConnectionRefusedError)):
        return True
    if _RAISED_IN_SCRIPT in str(exc):  # earlier writes of the script stay
        return False
    if isinstance(exc, _REFUSAL_CLASSES):  # the client cuts the code off the text of these
        return True
    if not isinstance(exc, client.ResponseError):
        return False
    found = _CODE.match(str(exc))
    return found is not None and found[0] in _REFUSALS


class Unavailable(Exception):
    """The store cannot answer now; sending the same again later is safe.

    ``args[0]`` says what was and what was not applied; ``retry_after`` is in seconds.
    """

    retry_after: int = 1


class Stranger(Unavailable):
    """The store is not the one that was asked for its charter."""


class Unknown(LookupError):
    """What was asked for does not exist; ``args[0]`` says what does."""


class Conflict(Exception):
    """The request contradicts what is stored; ``args[0]`` says how."""
