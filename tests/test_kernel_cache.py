"""Kernels where their cache can be written, and where it cannot: a service user often has no home."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

from stream.cli.compiling import note_compiling

COMPILE = """
import numpy as np
from stream.kernel import cache_folder, kernel
from tests.test_kernel_cache import doubled
print(cache_folder(), kernel(doubled)(np.int64(21)))
"""
NOWHERE = "/dev/null"  # nothing can be made below it, not even by root


def doubled(number):
    return number * 2


def compiles(tmp_path, **environment):
    """Where kernels are kept, and what one gives, in a process that knows only `environment`."""
    told = {"PATH": os.environ["PATH"], "PYTHONPATH": str(Path(__file__).parents[1]), **environment}
    done = subprocess.run(
        [sys.executable, "-c", COMPILE], env=told, cwd=tmp_path, capture_output=True, text=True, check=True
    )
    folder, found = done.stdout.split()
    assert found == "42"
    return folder


@pytest.mark.parametrize(
    "environment", [{"HOME": NOWHERE}, {"XDG_CACHE_HOME": NOWHERE}, {"NUMBA_CACHE_DIR": f"{NOWHERE}/kernels"}]
)
def test_without_a_folder_to_write_in_kernels_are_compiled_all_the_same(tmp_path, environment):
    assert compiles(tmp_path, **{"HOME": str(tmp_path), **environment}) == "None"
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("environment", "below"),
    [
        ({}, "home/.cache/bedload"),
        ({"XDG_CACHE_HOME": "caches"}, "caches/bedload"),
        ({"XDG_CACHE_HOME": "caches", "NUMBA_CACHE_DIR": "kernels"}, "kernels"),
    ],
)
def test_kernels_are_kept_where_the_environment_says(tmp_path, environment, below):
    paths = {name: str(tmp_path / path) for name, path in {"HOME": "home", **environment}.items()}
    folder = Path(compiles(tmp_path, **paths))
    assert folder.parent == tmp_path / below
    assert list(folder.glob("*/test_kernel_cache.doubled*.nbc"))


def test_who_has_no_folder_for_caches_is_told_what_that_costs_and_cures_it(monkeypatch, capsys):
    monkeypatch.setattr("stream.kernel.cache_folder", lambda: None)
    note_compiling("ftrl")
    told = capsys.readouterr().err
    assert "at each start" in told and "XDG_CACHE_HOME" in told
