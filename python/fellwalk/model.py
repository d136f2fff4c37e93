"""Models named on the command line or in a record: module:object or file.py:object."""

import importlib
import importlib.util
import inspect
import os
import sys
from collections.abc import Callable
from pathlib import Path
from types import ModuleType

import cloudpickle

from fellwalk.density import Density
from fellwalk.errors import ArgumentError

__all__ = ["find_model"]


def find_model(name: str) -> Density:
    """The Density that `name` stands for; the object may be a Density or a function without arguments that makes one.

    Errors: ArgumentError with what was not found, and where.
    """
    place, colon, attribute = name.rpartition(":")
    if not colon or not place or not attribute:
        raise ArgumentError(f"a model is named module:object or file.py:object, for example hives.py:density; "
                            f"got {name!r}")
    module = _from_file(Path(place)) if place.endswith(".py") else _from_module(place)
    found: object = module
    for part in attribute.split("."):
        if not hasattr(found, part):
            have = [key for key, value in vars(module).items() if isinstance(value, Density)]
            raise ArgumentError(f"{place} has no {attribute!r}" + (f"; it has the densities {', '.join(have)}" if have
                                else ", nor any other fellwalk.Density"))
        found = getattr(found, part)
    if not isinstance(found, Density) and callable(found):
        found = _made(name, found)
    if not isinstance(found, Density):
        raise ArgumentError(f"{name} is a {type(found).__name__}; it must be a fellwalk.Density, or a function without "
                            "arguments that makes one")
    found.model = f"{Path(place).resolve()}:{attribute}" if place.endswith(".py") else name
    return found


def _made(name: str, function: Callable[..., object]) -> object:
    try:
        inspect.signature(function).bind()
    except TypeError:
        raise ArgumentError(f"{name} needs arguments, so it is not a model: that is a fellwalk.Density (for example "
                            "density = fellwalk.Density(f, dimension), with a start), or a function without arguments "
                            "that makes one") from None
    except ValueError:
        pass  # some compiled functions have no signature to look at
    made = function()
    if isinstance(made, Density) and made.made_by is None:
        made.made_by = function, ()  # as Density.factory does: workers make it for themselves
    return made


def _from_file(path: Path) -> ModuleType:
    if not path.is_file():
        raise ArgumentError(f"there is no file {path}")
    name = f"_fellwalk_model_{path.stem}"
    spec = importlib.util.spec_from_file_location(name, path)
    if spec is None or spec.loader is None:
        raise ArgumentError(f"{path} cannot be loaded as a Python file")
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    # as with `python file.py`: its neighbours can be imported, now and later
    _on_path(str(path.resolve().parent))
    try:
        spec.loader.exec_module(module)
    except BaseException:
        del sys.modules[name]
        raise
    cloudpickle.register_pickle_by_value(module)  # workers cannot import it by this name
    return module


def _on_path(folder: str) -> None:
    if folder not in sys.path:
        sys.path.insert(0, folder)


def _from_module(place: str) -> ModuleType:
    _on_path(os.getcwd())
    try:
        return importlib.import_module(place)
    except ModuleNotFoundError as error:
        if error.name and (place == error.name or place.startswith(error.name + ".")):
            raise ArgumentError(f"there is no module {place!r} here or on the Python path; for a file write "
                                f"{place}.py:object") from None
        raise
