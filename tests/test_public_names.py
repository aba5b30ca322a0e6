"""The public surface stays what it is, whichever module was imported first."""

import importlib
import pkgutil

import embersift


def test_public_names_survive_the_import_of_every_module():
    # a module that bears the name of a public function would quietly take its place
    for module in pkgutil.walk_packages(embersift.__path__, "embersift."):
        if not module.name.endswith("__main__"):
            importlib.import_module(module.name)
    assert callable(embersift.screen)
    assert callable(embersift.tally)
    assert callable(embersift.Recipe)
    assert embersift.laws.find("lehmer2021")
    assert embersift.laws.__name__ == "embersift.laws"
    assert set(embersift.__all__) <= set(dir(embersift))
