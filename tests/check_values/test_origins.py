"""Every check value says who issued it, where, and how it was obtained."""

import pytest

import tests.check_values as check_values
from tests.check_values import FOLDER, ORIGIN, values

FILES = sorted(file.stem for file in FOLDER.glob("*.toml"))


@pytest.mark.parametrize("name", FILES)
def test_every_value_says_where_it_is_from_and_has_a_name_of_its_own(name):
    found = values(name)
    assert len({value["name"] for value in found}) == len(found)


@pytest.mark.parametrize("missing", ["name", *ORIGIN])
def test_a_value_that_does_not_say_is_refused(missing, tmp_path, monkeypatch):
    keys = [f'{key} = "said"' for key in ("name", *ORIGIN) if key != missing]
    (tmp_path / "odd.toml").write_text("\n".join(["[[value]]", *keys]), "utf-8")
    monkeypatch.setattr(check_values, "FOLDER", tmp_path)
    with pytest.raises(ValueError, match=rf"odd.toml, value 1: {missing} is missing"):
        values("odd")


def test_a_file_without_values_is_refused(tmp_path, monkeypatch):
    (tmp_path / "none.toml").write_text("value = []", "utf-8")
    monkeypatch.setattr(check_values, "FOLDER", tmp_path)
    with pytest.raises(ValueError, match=r"none.toml holds no value"):
        values("none")
