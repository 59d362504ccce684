"""Plug-ins: one file each, found by file name (see mechbench.discovery)."""

if __name__ != "mechbench.mechanisms":
    _message = "import mechbench.mechanisms, not mechanisms: the folder is a part of mechbench"
    raise ImportError(_message)
