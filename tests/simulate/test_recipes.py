"""Recipes and shipped files are found in a checkout and in an installed package, and checked."""

from __future__ import annotations

import pytest

from sigguard import resources
from sigguard.errors import UsageError
from sigguard.resources import resource_path
from sigguard.simulate import recipes
from sigguard.simulate.recipes import load_recipe, training_recipe
from sigguard.simulate.rhythms import RHYTHM_WEIGHTS


def test_the_training_recipe_holds_what_the_method_asks():
    recipe = training_recipe()
    assert recipe.snr_db == (-6.0, 30.0)
    assert recipe.duration_s == (5.0, 30.0)
    assert set(recipe.rhythms) == set(RHYTHM_WEIGHTS)  # its own weights: more of what is hard to trust
    assert set(recipe.disturbances) == set(recipes.DISTURBANCES)
    assert sum(recipe.rhythms.values()) == pytest.approx(1.0)


def test_the_demo_recipe_has_eight_recordings_of_different_names():
    names = [entry["name"] for entry in load_recipe("demo")["recording"]]
    assert len(names) == len(set(names)) == 8


@pytest.mark.parametrize(
    ("kind", "name"), [("poems", "x"), ("models", "none.npz"), ("synthetic", "../pyproject.toml")]
)
def test_only_shipped_files_are_found(kind, name):
    with pytest.raises(UsageError):
        resource_path(kind, name)


def test_an_installed_package_comes_first(tmp_path, monkeypatch):
    package = tmp_path / "sigguard"
    (package / "_synthetic").mkdir(parents=True)  # as in a wheel: data beside the modules, no module itself
    installed = package / "_synthetic" / "training.toml"
    installed.write_text("seed = 1\n")
    (tmp_path / "synthetic").mkdir()
    (tmp_path / "synthetic" / "training.toml").write_text("seed = 2\n")
    with monkeypatch.context() as patch:
        patch.setattr(resources, "_PACKAGE", package)
        assert resource_path("synthetic", "training.toml") == installed
        assert load_recipe("training") == {"seed": 1}
        with pytest.raises(UsageError, match="missing or unusable"):
            training_recipe()
        installed.unlink()
        assert load_recipe("training") == {"seed": 2}
    assert training_recipe().seed != 1


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("sinus = 0.20", "samba = 0.20", "samba"),
        ("wander = 0.12", "wander = -1", "negative"),
        ("[snr_db]", "[snr]", "snr_db"),
        ("low = -6.0", "low = ", "cannot be read"),
        ("bursting = 0.25", "jumping = 0.25", "jumping"),
    ],
)
def test_a_broken_recipe_says_what_is_wrong(tmp_path, monkeypatch, old, new, message):
    text = resource_path("synthetic", "training.toml").read_text(encoding="utf-8")
    assert old in text
    (tmp_path / "training.toml").write_text(text.replace(old, new, 1), encoding="utf-8")
    monkeypatch.setattr(recipes, "resource_path", lambda kind, name: tmp_path / name)
    with pytest.raises(UsageError, match=message):
        training_recipe()


def test_kinds_of_shipped_files():
    assert resources.KINDS == ("models", "synthetic")
