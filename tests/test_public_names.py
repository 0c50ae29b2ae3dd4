"""Every module says in __all__ what others may import, and has it."""

import importlib
from pathlib import Path

import pytest

import benchtool

MODULES = sorted(path.stem for path in Path(benchtool.__file__).parent.glob("*.py") if path.stem != "__init__")


@pytest.mark.parametrize("name", MODULES)
def test_all_is_true(name):
    module = importlib.import_module(f"benchtool.{name}")
    assert len(set(module.__all__)) == len(module.__all__) > 0
    for public in module.__all__:
        assert hasattr(module, public)


@pytest.mark.parametrize("name", MODULES)
def test_every_public_function_and_class_is_listed_and_explained(name):
    module = importlib.import_module(f"benchtool.{name}")
    own = {
        public
        for public, value in vars(module).items()
        if not public.startswith("_") and getattr(value, "__module__", None) == module.__name__ and callable(value)
    }
    if name != "cli":  # the commands are reached through its app
        assert own <= set(module.__all__)
    assert all(getattr(module, public).__doc__ for public in own)
