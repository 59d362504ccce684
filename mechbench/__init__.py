"""mechbench: how much a bidder can gain by bidding below value, at your market's size, for every pricing rule."""

from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from mechbench.frames import catalogue, choose, measure

__all__ = ["catalogue", "choose", "measure"]

_root = Path(__file__).resolve().parent.parent
if (_root / "pyproject.toml").is_file() and (_root / "mechanisms").is_dir():
    # In a checkout the plug-in folders stand beside this one; without this line an import from the root of a
    # checkout that is not the installed one would find no plug-ins, or another checkout's.
    __path__.append(str(_root))


def __getattr__(name: str) -> Any:
    """Load the functions of the Python surface when they are asked for: pandas is slow to import."""
    if name in __all__:
        from mechbench import frames  # noqa: PLC0415 - see above

        return getattr(frames, name)
    msg = f"module 'mechbench' has no attribute {name!r}"
    raise AttributeError(msg)


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])
