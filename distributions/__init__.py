"""Plug-ins: one file each, found by file name (see mechbench.discovery)."""

if __name__ != "mechbench.distributions":
    _message = "import mechbench.distributions, not distributions: the folder is a part of mechbench"
    raise ImportError(_message)
