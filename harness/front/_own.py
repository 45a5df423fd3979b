"""See to it that `harness` and `generators` are the packages that came with `arcassay`.

Both names are common. Where a folder of that name stands earlier on the path, Python would import it
instead, and nothing that follows would make sense.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path


def foreign_package() -> str | None:
    """Say which of our packages would be imported from elsewhere, in one line, or None."""
    front = Path(__file__).resolve().parent
    # Installed, the three stand side by side; in a checkout, this one is harness/front.
    root = front.parent if front.name == "arcassay" else front.parent.parent
    for name in ("generators", "harness"):
        spec = importlib.util.find_spec(name)
        places = [Path(place).resolve() for place in (spec.submodule_search_locations or [])] if spec else []
        if places != [root / name]:
            found = str(places[0]) if places else "nothing"
            return (
                f"the package {name!r} would be imported from {found}, which is not the one of arcassay "
                f"({root / name}); run from another folder, or take that folder off the Python path"
            )
    return None
