"""Where the benchmarks' inputs and scoring are: in the installed package or the checkout."""

import sys
from importlib import import_module
from importlib.util import module_from_spec, spec_from_file_location
from pathlib import Path
from types import ModuleType
from typing import Any, Final

from service.errors import Unavailable

PACKAGE: Final = "benchmarks"


def benchmark(name: str) -> Any:
    """Return a module of the benchmarks, which stand beside the service and not in it.

    Raises
    ------
    Unavailable
        This installation lacks them, or a library that this one needs.
    """
    if PACKAGE not in sys.modules:
        sys.modules[PACKAGE] = _package()
    try:
        return import_module(f"{PACKAGE}.{name}")
    except ModuleNotFoundError as error:
        raise Unavailable(
            "no-library",
            f"The benchmark needs {error.name}, which comes with the extra `test`; install it.",
        ) from error


def _package() -> ModuleType:
    here = Path(__file__).parent
    homes = (here.parent / PACKAGE, here.parents[2] / PACKAGE)
    for home in homes:
        entrance = home / "__init__.py"
        spec = spec_from_file_location(PACKAGE, entrance, submodule_search_locations=[str(home)])
        if entrance.is_file() and spec is not None and spec.loader is not None:
            package = module_from_spec(spec)
            spec.loader.exec_module(package)
            return package
    raise Unavailable("no-benchmarks", "This installation lacks the benchmarks; install it anew.")
