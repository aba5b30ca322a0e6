"""Every declaration is complete and true to its own check values; user laws behave like others."""

import doctest
import importlib
import math
import pkgutil

import numpy as np
import pytest

import embersift
from embersift.errors import LawError
from embersift.law_pages import bibtex_lines, law_lines, overview_lines
from embersift.laws import all_laws
from embersift.laws.declaration import BackgroundLaw, Host
from embersift.laws.from_recipe import laws_of_recipe

LAWS = [(f"{law.kind}:{law.name}", law) for law in all_laws()]


@pytest.mark.parametrize(("label", "law"), LAWS, ids=[label for label, _ in LAWS])
def test_a_law_says_what_an_astronomer_must_know(label, law):
    assert law.summary
    assert law.formula_text
    assert law.outside
    assert law.checks or math.isnan(law.values.get("k", 0.0))
    for span in law.ranges:
        assert span.low < span.high
    if law.status == "MEM":
        assert law.status_note, "a law from memory says what was not verified"
    if law.status in ("V", "V-abs"):
        assert law.source.citation
    if isinstance(law, BackgroundLaw):
        assert law.band.low < law.band.high
        assert law.imf in ("salpeter", "kroupa", "chabrier")
        assert law.light


def test_the_issue_s_laws_are_all_there():
    names = {law.name for law in all_laws()}
    wanted = "constant two-regime merloni2008 xie2012 isco madau2014 inayoshi2019 marconi2004 "
    wanted += "hopkins2007 vasudevan2009 lusso2012-type1 lusso2012-type2 netzer2019 shen2020 "
    wanted += "duras2020 duras2020-type1 duras2020-type2 duras2020-eddington duras2020-mass "
    wanted += "lehmer2010 lehmer2016 lehmer2019 lehmer2021 brorby2016 mineo2012 mineo2014 "
    wanted += (
        "fragos2013 aird2017 fornasini2018 grimm2003 ranalli2003 gilfanov2004 mineo2012gas none"
    )
    assert set(wanted.split()) <= names


def test_pages_of_laws_fit_eighty_columns():
    assert max(len(line) for line in overview_lines(80)) <= 90
    for _, law in LAWS:
        assert max(len(line) for line in law_lines([law], 80)) <= 80


def test_bibtex_has_one_entry_per_source():
    text = "\n".join(bibtex_lines(all_laws()))
    sources = {law.source.citation for law in all_laws() if law.source.citation and law.source.year}
    assert text.count("@article") == len(sources)


def test_a_law_of_the_user_gives_what_it_says():
    laws = laws_of_recipe(
        {
            "mine": {
                "light": ["hmxb"],
                "band": [0.5, 8.0],
                "imf": "salpeter",
                "log_per_sfr": [39.0, 0.1],
                "sfr_power": 2.0,
                "sfr_redshift": 1.0,
                "sfr_oh12_slope": -1.0,
            }
        }
    )
    host = Host(*(np.array([v]) for v in (1e9, 3.0, 7.69, 1.0)))
    # by hand: 1e39 x 3^2 x (1+1)^1 x 10^(-1 x -1) = 1.8e41
    light = laws["mine"].formula(host, laws["mine"].values)["hmxb"][0]
    assert light == pytest.approx(1.8e41, rel=1e-12)
    assert laws["mine"].needs_oh12


@pytest.mark.parametrize(
    ("section", "words"),
    [
        ({"band": [0.5, 8], "imf": "kroupa"}, "light is missing"),
        ({"light": ["hmxb"], "band": [8, 0.5], "imf": "kroupa"}, "upside down"),
        ({"light": ["hmxb"], "band": [0.5, 8], "imf": "krupa"}, "Did you mean kroupa"),
        ({"light": ["hmxb"], "band": [0.5, 8], "imf": "kroupa"}, "no term"),
        (
            {"light": ["hmxb"], "band": [0.5, 8], "imf": "kroupa", "log_per_sfrr": 39},
            "Did you mean log_per_sfr",
        ),
        ({"light": ["xrb"], "band": [0.5, 8], "imf": "kroupa"}, "expected"),
    ],
)
def test_a_law_of_the_user_that_cannot_be_meant_is_refused(section, words):
    with pytest.raises(LawError) as refusal:
        laws_of_recipe({"mine": section})
    assert words in str(refusal.value)
    assert "mine" in str(refusal.value)


def test_a_law_of_the_user_cannot_take_a_built_in_name():
    with pytest.raises(LawError, match="built-in"):
        laws_of_recipe({"lehmer2021": {"light": ["hmxb"], "band": [0.5, 8], "imf": "kroupa"}})


def test_examples_in_docstrings_are_true():
    failed = []
    for module in pkgutil.walk_packages(embersift.__path__, "embersift."):
        if module.name.endswith("__main__"):
            continue
        outcome = doctest.testmod(importlib.import_module(module.name))
        if outcome.failed:
            failed.append(module.name)
    assert not failed
