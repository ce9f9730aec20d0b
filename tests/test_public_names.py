"""What the package offers at its door, and that every offer says what it raises."""

from __future__ import annotations

import ast
import inspect
import textwrap
from pathlib import Path

import pytest

import evidence as ev
from evidence import distributions

HOME = Path(ev.__file__).parent

# a change here is a change for every user: say so in the release notes
NAMES = [
    "Approximation",
    "Batch",
    "DataError",
    "DeclarationError",
    "EvidenceWarning",
    "Model",
    "Study",
    "Weighing",
    "approximate",
    "audit",
    "blend",
    "distributions",
    "evidence_function",
    "fit_hyperparameters",
    "prior_predictive",
    "read_data",
    "read_study",
    "rehearse",
    "stress_observations",
    "stress_priors",
    "weigh",
    "weigh_many",
]


def test_the_names_are_these():
    assert ev.__all__ == NAMES
    assert len(NAMES) <= 30
    assert set(NAMES) <= set(dir(ev))


def test_every_name_is_there_and_stays_the_same():
    for name in NAMES:
        assert getattr(ev, name) is getattr(ev, name)
    with pytest.raises(AttributeError, match="module 'evidence' has no attribute 'weihg'"):
        _ = ev.weihg


def test_no_public_name_is_a_rooms():
    """A name that is loaded on use would turn into the module after the first import."""
    rooms = {path.stem for path in HOME.iterdir() if path.suffix == ".py" or path.is_dir()}
    assert set(NAMES) & rooms == {"distributions"}


PUBLIC = [getattr(ev, name) for name in NAMES if name != "distributions"]
PUBLIC += [getattr(distributions, name) for name in distributions.__all__]
OBJECTS = [x for x in PUBLIC if inspect.isfunction(x) or inspect.isclass(x)]


def _methods(owner: type):
    for name, member in vars(owner).items():
        plain = getattr(member, "__func__", getattr(member, "fget", member))
        plain = getattr(plain, "func", plain)
        if not inspect.isfunction(plain) or plain.__code__.co_filename == "<string>":
            continue  # made by dataclasses
        if name == "__init__":  # the class says what its constructor raises
            yield f"{owner.__name__}.{name}", plain, owner
        elif not name.startswith("_"):
            yield f"{owner.__name__}.{name}", plain, getattr(owner, name)


def _documented():
    for thing in OBJECTS:
        yield thing.__name__, thing, thing
        if inspect.isclass(thing) and thing.__module__.startswith("evidence"):
            yield from _methods(thing)


def raises(source: str) -> bool:
    """Whether a function itself raises something that a user can meet."""
    for node in ast.walk(ast.parse(textwrap.dedent(source))):
        if isinstance(node, ast.Raise) and node.exc is not None:
            name = getattr(getattr(node.exc, "func", node.exc), "id", "")
            if name != "NotImplementedError":
                return True
    return False


@pytest.mark.parametrize(
    ("name", "thing", "speaker"), [pytest.param(*x, id=x[0]) for x in _documented()]
)
def test_every_offer_is_described(name, thing, speaker):
    text = inspect.getdoc(speaker)
    assert text, f"{name} has no docstring"
    assert text[0].isupper() or text[0].isdigit()
    if inspect.isfunction(thing) and raises(inspect.getsource(thing)):
        assert "Raises" in text, f"{name} raises and its docstring does not say so"


def test_the_check_sees_a_raise():
    assert raises("def f():\n    if x:\n        raise ValueError('no')")
    assert not raises("def f():\n    raise NotImplementedError")
    assert not raises("def f():\n    try:\n        g()\n    except E:\n        raise")


SIGNATURES = {
    "approximate": "(model, data=None, *, depth='standard', seed=0, progress=None)",
    "audit": "(approximation, *, depth, progress=None)",
    "weigh": "(models, data=None, *, prior_probabilities=None, depth='standard', seed=0, "
    "progress=None)",
    "read_data": "(path, *, categories=())",
}


@pytest.mark.parametrize("name", SIGNATURES)
def test_problem_by_place_and_knobs_by_name(name):
    signature = inspect.signature(getattr(ev, name))
    bare = [p.replace(annotation=p.empty) for p in signature.parameters.values()]
    assert str(inspect.Signature(bare)) == SIGNATURES[name]
