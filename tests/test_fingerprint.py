"""Whatever a user's function reads from outside: changed, it gives another digest and number."""

from __future__ import annotations

import collections
import contextlib
import dataclasses
import fractions
import functools
import importlib
import sys
import types
from unittest import mock

import jax
import jax.numpy as jnp
import numpy as np
import pandas as pd
import pytest

import evidence as ev
from evidence import fingerprint
from evidence.distributions import Normal
from evidence.fingerprint import read_functions

NUMBER = 1.0
ARRAY = np.array([1.0, 2.0])
TABLE = {"k": 1.0}
SPACE = types.SimpleNamespace(k=1.0)
QUEUE = collections.deque([1.0])
FRAME = pd.DataFrame({"k": [1.0, 2.0]})
MIXED = pd.DataFrame({"k": [1.0, 2.0], "island": ["Reed", "Alder"]})
HELPERS = types.ModuleType("helpers_of_the_test")
HELPERS.k, HELPERS.inner = 1.0, types.ModuleType("helpers_of_the_test.inner")
HELPERS.inner.k, HELPERS.inner.outer = 1.0, HELPERS
sys.modules["helpers_of_the_test"] = HELPERS


class Settings:
    """An object of the user's, with all the ways in which it can hold a number."""

    shared = 1.0

    def __init__(self):
        self.k = 1.0

    @property
    def computed(self):
        return NUMBER

    @functools.cached_property
    def kept(self):
        return NUMBER

    def method(self):
        return NUMBER

    @staticmethod
    def static():
        return NUMBER

    def __add__(self, other):
        return NUMBER


class Inheriting(Settings):
    pass


@dataclasses.dataclass(slots=True)
class Slotted:
    k: float


SETTINGS, HEIR, SLOTTED = Settings(), Inheriting(), Slotted(1.0)


def helper(a=1.0, *, b=1.0):
    return a * b


def deeper():
    return helper()


def redefined():
    return 1.0


@jax.jit
def jitted(x):
    return x * NUMBER


def _digest(*functions):
    return read_functions(functions).digest


def _set(obj, name, value):
    return lambda patch: patch.enter_context(mock.patch.object(obj, name, value))


def _item(obj, key, value):
    @contextlib.contextmanager
    def change():
        before = obj[key]
        obj[key] = value
        yield
        obj[key] = before

    return lambda patch: patch.enter_context(change())


def _frame(frame):
    @contextlib.contextmanager
    def change():
        frame.loc[0, "k"] = 5.0
        yield
        frame.loc[0, "k"] = 1.0

    return lambda patch: patch.enter_context(change())


HERE = sys.modules[__name__]
CHANGES = {
    "a global number": (lambda p: NUMBER, _set(HERE, "NUMBER", 2.0)),
    "its type": (lambda p: NUMBER, _set(HERE, "NUMBER", True)),
    "an array in place": (lambda p: ARRAY, _item(ARRAY, 0, 3.0)),
    "an array's shape": (lambda p: ARRAY, _set(HERE, "ARRAY", ARRAY[None])),
    "an item of a dict": (lambda p: TABLE["k"], _item(TABLE, "k", 2.0)),
    "a namespace": (lambda p: SPACE.k, _set(SPACE, "k", 2.0)),
    "a queue": (lambda p: QUEUE[0], _item(QUEUE, 0, 2.0)),
    "a frame in place": (lambda p: FRAME, _frame(FRAME)),
    "a frame with text": (lambda p: MIXED, _frame(MIXED)),
    "a default argument": (lambda p: helper(), _set(helper, "__defaults__", (2.0,))),
    "a keyword default": (lambda p: helper(), _item(helper.__kwdefaults__, "b", 2.0)),
    "a helper's helper": (lambda p: deeper(), _set(helper, "__defaults__", (2.0,))),
    "a redefined helper": (lambda p: redefined(), _set(HERE, "redefined", lambda: 2.0)),
    "an attribute": (lambda p: SETTINGS.k, _set(SETTINGS, "k", 2.0)),
    "a class attribute": (lambda p: SETTINGS.shared, _set(Settings, "shared", 2.0)),
    "an inherited one": (lambda p: HEIR.shared, _set(Settings, "shared", 2.0)),
    "an inherited method": (lambda p: HEIR.method(), _set(Settings, "method", lambda s: 2.0)),
    "what a property reads": (lambda p: SETTINGS.computed, _set(HERE, "NUMBER", 2.0)),
    "what a kept one reads": (lambda p: SETTINGS.kept, _set(HERE, "NUMBER", 2.0)),
    "what a method reads": (lambda p: SETTINGS.method(), _set(HERE, "NUMBER", 2.0)),
    "what a static reads": (lambda p: SETTINGS.static(), _set(HERE, "NUMBER", 2.0)),
    "what an operator reads": (lambda p: SETTINGS + 1, _set(HERE, "NUMBER", 2.0)),
    "a slot": (lambda p: SLOTTED.k, _set(SLOTTED, "k", 2.0)),
    "a user's module": (lambda p: HELPERS.k, _set(HELPERS, "k", 2.0)),
    "a module inside it": (lambda p: HELPERS.inner.k, _set(HELPERS.inner, "k", 2.0)),
    "what a jitted function reads": (lambda p: jitted(1.0), _set(HERE, "NUMBER", 2.0)),
    "what an inner function reads": (lambda p: (lambda: NUMBER)(), _set(HERE, "NUMBER", 2.0)),
    "what a bound method reads": (SETTINGS.method, _set(HERE, "NUMBER", 2.0)),
}


@pytest.mark.parametrize("what", CHANGES)
def test_what_changes_gives_another_digest(what):
    function, change = CHANGES[what]
    before = _digest(function)
    assert _digest(function) == before
    with contextlib.ExitStack() as patch:
        change(patch)
        assert _digest(function) != before
    assert _digest(function) == before


def _closure(k):
    return lambda p: k


def _imports_inside(p):
    import helpers_of_the_test

    return helpers_of_the_test.k


def test_closures_partials_and_imports_inside_are_read(monkeypatch):
    assert _digest(_closure(1.0)) == _digest(_closure(1.0)) != _digest(_closure(2.0))
    cell = [1.0]
    function = _closure(cell)
    before = _digest(function)
    cell[0] = 2.0
    assert _digest(function) != before
    parts = [functools.partial(helper, a) for a in (1.0, 1.0, 2.0)]
    assert _digest(parts[0]) == _digest(parts[1]) != _digest(parts[2])
    assert _digest(functools.partial(helper, b=1.0)) != _digest(functools.partial(helper, b=2.0))
    before = _digest(_imports_inside)
    monkeypatch.setattr(HELPERS, "k", 2.0)
    assert _digest(_imports_inside) != before


def test_which_of_two_known_objects_is_meant():
    """Both are read already when the third name is reached; it must not be taken for either."""
    one, two = Settings(), Settings()
    two.k = 2.0

    def make(third):
        return lambda p: one.k + two.k + third.k

    assert _digest(make(one)) == _digest(make(one)) != _digest(make(two))


def test_a_long_chain_of_functions_is_followed_to_its_end():
    def make(depth, value):
        function = _closure(value)
        for _ in range(depth):
            function = _closure(function)
        return function

    assert _digest(make(20, 1.0)) == _digest(make(20, 1.0)) != _digest(make(20, 2.0))
    # beyond every limit there is no digest to rely on: each time another one
    endless = make(200, 1.0)
    assert _digest(endless) != _digest(endless)


def test_what_does_not_matter_changes_nothing(monkeypatch):
    function = CHANGES["a global number"][0]
    before = _digest(function)
    monkeypatch.setattr(HERE, "ARRAY", np.zeros(7))
    assert _digest(function) == before
    # functions that call one another end all the same
    monkeypatch.setattr(HERE, "redefined", lambda: test_what_does_not_matter_changes_nothing)
    assert _digest(redefined) == _digest(redefined)


def test_library_functions_go_by_identity():
    first, second = (lambda p: jnp.sin(p)), (lambda p: jnp.cos(p))
    assert _digest(first) == _digest(first) != _digest(second)
    hidden = [np.sin]
    assert _digest(lambda p: hidden[0]) != _digest(lambda p: [np.cos][0])
    held = read_functions([_closure(np.linalg.norm)]).held
    assert any(x is np.linalg.norm for x in held)


def test_an_installed_package_of_the_users_is_read_too(tmp_path, monkeypatch):
    place = tmp_path / "site-packages"
    place.mkdir()
    (place / "reed_models.py").write_text("K = 1.0\ndef ll(p):\n    return K\n")
    monkeypatch.syspath_prepend(str(place))
    module = importlib.import_module("reed_models")
    before = _digest(module.ll)
    monkeypatch.setattr(module, "K", 2.0)
    assert _digest(module.ll) != before
    monkeypatch.delitem(sys.modules, "reed_models")


def test_float32_arrays_are_named():
    with jax.enable_x64(False):
        coarse = jnp.asarray([0.1, 0.2])
    weights = {"w": np.zeros(2, np.float32), "exact": np.zeros(2)}
    reading = read_functions([lambda p: (coarse, weights)])
    assert reading.float32 == ("coarse", "weights['w']")
    assert read_functions([CHANGES["an array in place"][0]]).float32 == ()


def test_large_arrays_are_sampled_and_held(monkeypatch):
    monkeypatch.setattr(fingerprint, "HASHED_BYTES", 800)
    monkeypatch.setattr(fingerprint, "SAMPLED_ITEMS", 50)
    large = np.zeros(1000)
    reading = read_functions([lambda p: large])
    assert any(x is large for x in reading.held)
    large[::20] = 1.0
    assert read_functions([lambda p: large]).digest != reading.digest


# through approximate: never the number of an old value

MODEL = ev.Model("level", {"x": Normal(0.0, 1.0)}, lambda p: Normal(p["x"], 1.0).log_prob(NUMBER))


def _number(model=MODEL):
    return ev.approximate(model, depth="none").log_evidence


def _exact(value):
    """Log density of one value under a prior and an error of unit variance each."""
    return -0.25 * value**2 - 0.5 * np.log(4 * np.pi)


def test_a_changed_global_changes_the_number(monkeypatch):
    assert _number() == pytest.approx(_exact(1.0), abs=1e-10)
    kept = len(MODEL.programs)
    assert _number() == pytest.approx(_exact(1.0), abs=1e-10)
    assert len(MODEL.programs) <= kept + 1  # the compiled search of the second fit
    monkeypatch.setattr(HERE, "NUMBER", 3.0)
    assert _number() == pytest.approx(_exact(3.0), abs=1e-10)


def test_objects_made_one_after_another_are_not_confused(monkeypatch):
    """A freed object's address is used again; a number kept under it would be stale."""
    monkeypatch.setattr(HERE, "SPACE", None)
    model = ev.Model(
        "ratio", {"x": Normal(0.0, 1.0)}, lambda p: Normal(p["x"], 1.0).log_prob(float(SPACE))
    )
    found = []
    for k in range(1, 9):
        HERE.SPACE = None
        HERE.SPACE = fractions.Fraction(k, 2)
        found.append(float(ev.approximate(model, depth="none").log_evidence))
    assert found == pytest.approx([_exact(k / 2) for k in range(1, 9)], abs=1e-10)
