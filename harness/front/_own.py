"""See to it that `harness` and `generators` are the packages that came with `arcassay`.

Both names are common. A plain folder of that name in a repository (no ``__init__.py``: a namespace package
to Python) is passed over, as it holds nothing that anybody imports by that name from there. Another
*package* of that name that stands earlier on the path is somebody's code: two packages cannot have one
name, so that is refused, in one line.
"""

from __future__ import annotations

import importlib.util
import sys
from importlib.machinery import ModuleSpec
from pathlib import Path

PACKAGES = ("generators", "harness")


def bind_packages() -> str | None:
    """Make the two names mean our packages, or say in one line why they cannot."""
    front = Path(__file__).resolve().parent
    # Installed, the three stand side by side; in a checkout, this one is harness/front.
    root = front.parent if front.name == "arcassay" else front.parent.parent
    for name in PACKAGES:
        spec = importlib.util.find_spec(name)
        places = [Path(place).resolve() for place in (spec.submodule_search_locations or [])] if spec else []
        if places == [root / name]:
            continue
        is_namespace = spec is None or spec.loader is None or not _has_code(places)
        if not is_namespace or name in sys.modules:
            return (
                f"the package {name!r} would be imported from {places[0] if places else 'nowhere'}, which is "
                f"not the one of arcassay ({root / name}); run from another folder, or take that folder off "
                "the Python path"
            )
        _import_from(root, name)
    return None


def _has_code(places: list[Path]) -> bool:
    return any((place / "__init__.py").exists() for place in places)


def _import_from(root: Path, name: str) -> None:
    folder = root / name
    spec: ModuleSpec | None = importlib.util.spec_from_file_location(
        name, folder / "__init__.py", submodule_search_locations=[str(folder)]
    )
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
