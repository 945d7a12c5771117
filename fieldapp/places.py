"""Where the files lie that ship with the program, in a checkout and in an installed wheel."""

from pathlib import Path
from typing import Literal

PACKAGE = Path(__file__).resolve().parent
CHECKOUT = PACKAGE.parent

# In the wheel they lie inside the package (pyproject.toml, force-include).
IN_WHEEL = {"static": "_static", "demo_routes": "_routes"}


def shipped(folder: Literal["static", "demo_routes"]) -> Path:
    """Return the folder of shipped files.

    Raises:
        FileNotFoundError: The installation lacks them; its sentence says what to do.
    """
    for place in (PACKAGE / IN_WHEEL[folder], CHECKOUT / folder):
        if place.is_dir():
            return place
    raise FileNotFoundError(
        f"The shipped folder {folder} is not beside the program. Install tapwitness again."
    )
