"""Every public name is documented: each parameter, what comes back, what is raised, an example."""

import inspect

import pytest

import chanbank


def public_callables():
    for name in chanbank.__all__:
        thing = getattr(chanbank, name)
        if inspect.isclass(thing) and issubclass(thing, BaseException):
            continue
        if inspect.isclass(thing):
            yield name, thing, thing.__init__
            for key, member in sorted(vars(thing).items()):
                if key.startswith("_") and key != "__call__":
                    continue
                function = member.__func__ if isinstance(member, classmethod) else member
                if inspect.isfunction(function):
                    yield f"{name}.{key}", function, function
        elif callable(thing):
            yield name, thing, thing


CALLABLES = list(public_callables())
IDS = [name for name, _, _ in CALLABLES]


@pytest.mark.parametrize("name, documented, function", CALLABLES, ids=IDS)
def test_docstring_names_every_parameter(name, documented, function):
    text = inspect.getdoc(documented)
    assert text, f"{name} has no docstring"
    body = text.split("Parameters\n----------", 1)[-1]
    for parameter in inspect.signature(function).parameters.values():
        if parameter.name in ("self", "cls") or "object.__init__" in repr(function):
            continue
        if parameter.kind in (parameter.VAR_POSITIONAL, parameter.VAR_KEYWORD):
            continue
        assert parameter.name in body, f"{name}: {parameter.name} is not documented"


@pytest.mark.parametrize("name, documented, function", CALLABLES, ids=IDS)
def test_docstring_has_an_example(name, documented, function):
    text = inspect.getdoc(documented)
    assert ">>>" in text or "Examples\n--------\nSee " in text, f"{name} has no example"


@pytest.mark.parametrize("name", chanbank.__all__)
def test_public_properties_are_documented(name):
    thing = getattr(chanbank, name)
    if not inspect.isclass(thing):
        return
    text = inspect.getdoc(thing) or ""
    for key, member in vars(thing).items():
        if isinstance(member, property) and not key.startswith("_"):
            assert member.__doc__ or key in text, f"{name}.{key} is not documented"
