"""mechbench: how much a bidder can gain by bidding below value, at your market's size, for every pricing rule."""

from pathlib import Path

_root = Path(__file__).resolve().parent.parent
if (_root / "pyproject.toml").is_file() and (_root / "mechanisms").is_dir():
    # In a checkout the plug-in folders stand beside this one; without this line an import from the root of a
    # checkout that is not the installed one would find no plug-ins, or another checkout's.
    __path__.append(str(_root))
