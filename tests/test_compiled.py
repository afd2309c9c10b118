"""Compiled code is thrown away when its own file changes, so it must depend on no other."""

from __future__ import annotations

import math
from types import ModuleType

import numba
import numpy as np
import pytest
from numba.core.dispatcher import Dispatcher

from service.digits import compiled, measures
from service.store import layout
from service.streams import fit, snapshots, walk


@pytest.mark.parametrize(
    "module", [walk, snapshots, fit, measures, layout], ids=lambda m: m.__name__
)
def test_compiled_functions_read_nothing_from_outside_their_file(module: ModuleType) -> None:
    functions = [f for f in vars(module).values() if isinstance(f, Dispatcher)]
    assert functions
    for function in functions:
        assert function.py_func.__module__ == module.__name__
        for name in function.py_func.__code__.co_names:
            value = vars(module).get(name, math)
            assert value in (math, np) or value in functions, (function, name)


def test_code_is_kept_where_there_is_a_folder_and_made_anew_where_there_is_none(
    tmp_path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def doubled(x):
        return 2 * x

    assert compiled.compiled(doubled)(21) == 42

    def nowhere(*_: object, **options: object):
        if options.get("cache"):
            raise RuntimeError("cannot cache function: no locator available")
        return numba.njit(**options)

    monkeypatch.setattr(compiled, "njit", nowhere)
    assert compiled.compiled(doubled)(21) == 42
