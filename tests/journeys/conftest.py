"""The shipped round, rehearsed once for all journeys and kept."""

from dataclasses import dataclass
from pathlib import Path

import pytest

from tests.journeys import walks


@dataclass(frozen=True)
class Kept:
    """A rehearsal that ended: what it said, and the folders it was given and left."""

    walked: walks.Walked
    home: Path
    spare: Path
    folder: Path

    @property
    def nodes(self) -> dict[str, Path]:
        """The folders of the nodes that it left."""
        return {path.name: path for path in sorted(self.folder.iterdir())}


@pytest.fixture(scope="session")
def kept(tmp_path_factory: pytest.TempPathFactory) -> Kept:
    """Give the shipped round rehearsed from a strange folder in an empty home, and kept."""
    root = tmp_path_factory.mktemp("kept")
    places = [root / name for name in ("home", "spare", "elsewhere", "kept")]
    home, spare, elsewhere, folder = places
    for place in places[:3]:
        place.mkdir()
    env = walks.bare(home, spare)
    walked = walks.run("rehearse", "--json", "--keep", str(folder), cwd=elsewhere, env=env)
    return Kept(walked, home, spare, folder)
