"""Settings of an install: where a node's data folder lies unless a command names one."""

from pathlib import Path

APP = "tapwitness"


def default_folder() -> Path:
    """Return the user's data folder for a node (platformdirs)."""
    from platformdirs import user_data_path

    return Path(user_data_path(APP, appauthor=False)) / "node"
