"""Compiled code is thrown away when its own file changes, so it must depend on no other."""

from __future__ import annotations

import ast
import inspect
import math
from types import ModuleType

import numba
import numpy as np
import pytest
from numba.core.dispatcher import Dispatcher

from service.batches import identity, instants
from service.digits import compiled, measures
from service.store import layout
from service.streams import fit, snapshots, walk

MODULES = (identity, instants, measures, walk, snapshots, fit, layout)


def own_numbers(module: ModuleType) -> set[str]:
    """Return the names that a module gives to numbers out of its own numbers alone."""
    names: set[str] = set()
    for statement in ast.parse(inspect.getsource(module)).body:
        if not isinstance(statement, ast.Assign):
            continue
        parts = list(ast.walk(statement.value))
        used = {part.id for part in parts if isinstance(part, ast.Name)}
        plain = (ast.Constant, ast.BinOp, ast.operator, ast.Name, ast.expr_context, ast.Tuple)
        if all(isinstance(part, plain) for part in parts) and used <= names:
            names |= {
                part.id
                for target in statement.targets
                for part in ast.walk(target)
                if isinstance(part, ast.Name)
            }
    return names


@pytest.mark.parametrize("module", MODULES, ids=lambda m: m.__name__)
def test_compiled_functions_read_nothing_from_outside_their_file(module: ModuleType) -> None:
    functions = [f for f in vars(module).values() if isinstance(f, Dispatcher)]
    assert functions
    numbers = own_numbers(module)
    for function in functions:
        assert function.py_func.__module__ == module.__name__
        for name in function.py_func.__code__.co_names:
            if name not in vars(module) or name in numbers:
                continue
            value = vars(module)[name]
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
