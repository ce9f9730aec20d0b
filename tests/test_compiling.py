"""Float64 and a compile cache of our own, without a trace in the user's settings."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import textwrap
import threading

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from evidence import compiling
from evidence.compiling import Program, as_numpy, cache_directory, float64, on_device

FIT = """
import evidence as ev
from evidence.distributions import Normal
def fit():
    model = ev.Model("level", {"x": Normal(0.0, 1.0)}, lambda p: Normal(p["x"], 1.0).log_prob(1.0))
    return ev.approximate(model, depth="none")
"""


def _python(program, **environment):
    """Run a program in a fresh process; return what it printed as JSON."""
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", textwrap.dedent(FIT) + textwrap.dedent(program)],
        capture_output=True,
        text=True,
        env={**os.environ, **environment},
        cwd=os.getcwd(),
    )
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    return json.loads(done.stdout)


def _entries(folder):
    """Names of the entries below a folder, without the times of last use."""
    return {p.name for p in folder.rglob("*") if p.is_file() and not p.name.endswith("-atime")}


def _user_dtype():
    return jax.jit(lambda x: x * 0.1)(jnp.arange(3.0)).dtype


def test_float64_inside_and_float32_outside():
    assert not jax.config.jax_enable_x64
    assert _user_dtype() == np.float32
    program = Program(lambda x: {"y": x * 0.1, "exact": jnp.sum(x) + 1e-12})
    found = as_numpy(program(np.arange(3.0)))
    assert found["y"].dtype == np.float64
    assert found["exact"] == 3.0 + 1e-12
    assert not jax.config.jax_enable_x64
    assert _user_dtype() == np.float32
    assert on_device({"a": np.arange(2.0)})["a"].dtype == np.float64
    assert jnp.asarray(np.arange(2.0)).dtype == np.float32


def test_an_exception_inside_leaves_float32_outside():
    def fails(x):
        raise RuntimeError("in the middle")

    with pytest.raises(RuntimeError, match="in the middle"):
        Program(fails)(np.zeros(1))
    assert not jax.config.jax_enable_x64
    assert not jax.config.jax_compilation_cache_dir
    assert _user_dtype() == np.float32


def test_no_setting_of_jax_changes():
    """All of them, not only those that we know of; and no logger, filter or random state."""
    before = dict(jax.config.values)
    loggers = [compiling.logging.getLogger(n).disabled for n in compiling._NOISY_LOGGERS]
    state = np.random.get_state()[1].copy()  # noqa: NPY002 - the user's global state is meant
    Program(lambda x: jnp.cos(x) * 17.0)(np.arange(4.0))
    assert dict(jax.config.values) == before
    assert [compiling.logging.getLogger(n).disabled for n in compiling._NOISY_LOGGERS] == loggers
    assert np.array_equal(np.random.get_state()[1], state)  # noqa: NPY002


def test_hasty_programs_give_the_same_numbers():
    def function(x):
        return jnp.linalg.slogdet(jnp.outer(x, x) + jnp.eye(4))[1] + jnp.sum(jnp.sin(x))

    x = np.linspace(0.1, 2.0, 4)
    plain, hasty = Program(function)(x), Program(function, hasty=True)(x)
    assert float(hasty) == pytest.approx(float(plain), abs=1e-14)


def test_a_compiler_that_knows_no_options_is_met(monkeypatch):
    monkeypatch.setattr(compiling, "_HASTY", {"no_such_option_of_any_compiler": True})
    program = Program(lambda x: x * 2.0, hasty=True)
    assert float(program(np.float64(4.0))) == 8.0
    assert float(program(np.float64(5.0))) == 10.0


def test_errors_of_the_program_itself_are_not_swallowed(monkeypatch):
    """Only a hasty program is compiled again; what fails then is told."""

    def broken(*arguments):
        raise jax.errors.JaxRuntimeError("out of memory")

    program = Program(lambda x: x)
    monkeypatch.setattr(program, "_jitted", broken)
    with pytest.raises(jax.errors.JaxRuntimeError, match="out of memory"):
        program(np.zeros(1))


def test_threads_each_get_float64_and_leave_float32():
    """Programs of different threads, and the user's own in between, at the same time."""
    found, errors = {}, []
    gate = threading.Barrier(4)

    def work(k):
        try:
            gate.wait(30)
            program = Program(lambda x: jnp.sum(x) * k + 1e-12)
            mine = [float(program(np.arange(3.0))) for _ in range(3)]
            found[k] = (mine, _user_dtype(), jax.config.jax_enable_x64)
        except Exception as error:
            errors.append(error)

    threads = [threading.Thread(target=work, args=(k,)) for k in range(1, 5)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(120)
    assert not errors
    for k in range(1, 5):
        assert found[k] == ([3.0 * k + 1e-12] * 3, np.float32, False)
    assert not jax.config.jax_compilation_cache_dir


def test_the_directory_names_processor_and_version(monkeypatch, tmp_path):
    monkeypatch.setenv("EVIDENCE_COMPILE_CACHE", str(tmp_path))
    directory = cache_directory()
    assert directory.parent == tmp_path
    assert f"jaxlib-{jax.lib.__version__}" in directory.name
    monkeypatch.setenv("EVIDENCE_COMPILE_CACHE", "")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "xdg"))
    assert cache_directory().parent == tmp_path / "xdg" / "evidence" / "compiled"


@pytest.mark.parametrize("word", ["off", "OFF", "0", "no", "false"])
def test_words_that_switch_the_cache_off(monkeypatch, word):
    monkeypatch.setenv("EVIDENCE_COMPILE_CACHE", word)
    assert cache_directory() is None
    assert compiling._cache_settings() is None


def test_off_writes_no_file(tmp_path):
    found = _python(
        _PRINT,
        EVIDENCE_COMPILE_CACHE="off",
        XDG_CACHE_HOME=str(tmp_path),
        HOME=str(tmp_path),
    )
    assert found == pytest.approx(-0.25 - 0.5 * np.log(4 * np.pi), abs=1e-12)
    assert _entries(tmp_path) == set()


_PRINT = """
import json
print(json.dumps(float(fit().log_evidence)))
"""


def test_a_second_process_reuses_the_entries(tmp_path):
    first = _python(_PRINT, EVIDENCE_COMPILE_CACHE=str(tmp_path))
    entries = {p: p.stat().st_mtime_ns for p in tmp_path.rglob("*-cache")}
    assert entries, "the first process wrote no entry"
    second = _python(_PRINT, EVIDENCE_COMPILE_CACHE=str(tmp_path))
    assert second == first
    assert {p: p.stat().st_mtime_ns for p in tmp_path.rglob("*-cache")} == entries


def test_an_unwritable_cache_is_no_trouble(tmp_path):
    place = tmp_path / "file"
    place.write_text("in the way")
    assert _python(_PRINT, EVIDENCE_COMPILE_CACHE=str(place)) == pytest.approx(-1.5155, abs=1e-4)


_SIDE_BY_SIDE = """
import json, os, jax
jax.config.update("jax_persistent_cache_min_compile_time_secs", 0.0)
jax.config.update("jax_persistent_cache_min_entry_size_bytes", -1)
def entries(name):
    found = os.walk(os.environ[name])
    return sorted(f for _, _, files in found for f in files if f.endswith("-cache"))
def user(k):
    def users_function(x):
        return x * k + 1.0
    jax.jit(users_function)(1.0).block_until_ready()
SET = os.environ["WHEN"]
if SET == "before":
    jax.config.update("jax_compilation_cache_dir", os.environ["THEIRS"])
    user(2.0)
steps = [entries("THEIRS")]
fit()
steps.append(entries("THEIRS"))
if SET == "after":
    jax.config.update("jax_compilation_cache_dir", os.environ["THEIRS"])
user(3.0)
steps.append(entries("THEIRS"))
print(json.dumps([steps, entries("EVIDENCE_COMPILE_CACHE")]))
"""


@pytest.mark.parametrize("when", ["before", "after"])
def test_each_entry_lands_in_its_own_directory(tmp_path, when):
    """JAX keeps the first directory it sees; a careless package would catch the user's entries."""
    theirs, ours = tmp_path / "theirs", tmp_path / "ours"
    theirs.mkdir()
    ours.mkdir()
    (start, fitted, end), kept = _python(
        _SIDE_BY_SIDE, WHEN=when, THEIRS=str(theirs), EVIDENCE_COMPILE_CACHE=str(ours)
    )
    assert not any("users_function" in name for name in kept)
    if when == "before":  # theirs is set: it is used for ours too, and our own is not touched
        assert any("users_function" in name for name in start)
        assert any("evidence_" in name for name in fitted)
        assert kept == []
    else:
        assert start == fitted == []
        assert any("evidence_" in name for name in kept)
    assert sum("users_function" in name for name in end) == (2 if when == "before" else 1)
    if when == "after":
        assert not any("evidence_" in name for name in end)


def test_the_context_nests():
    with float64():
        assert jnp.zeros(1).dtype == np.float64
        with float64():
            assert jnp.zeros(1).dtype == np.float64
        assert jnp.zeros(1).dtype == np.float64
    assert jnp.zeros(1).dtype == np.float32
