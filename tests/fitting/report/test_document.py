"""results.json against the contract."""

from __future__ import annotations

import copy
import dataclasses
import json

import pytest
from layerlot.fitting.report import results_document
from layerlot.fitting.report.document import BareNumberError, document_text

from tests.fitting.report import fixtures
from tests.fitting.report.contract import ContractError, check_document


def constant_refused(name):
    """For json.loads: NaN and Infinity are not JSON."""
    raise AssertionError(f"{name} in a JSON document")


@pytest.mark.parametrize("name", [*fixtures.ALL, "big"])
def test_document_keeps_the_contract(name):
    """Every kind of result gives strict JSON with all fields of the contract, and reads back as it was written."""
    document = results_document(getattr(fixtures, name)())
    back = json.loads(document_text(document), parse_constant=constant_refused)
    assert back == document
    check_document(back)


@pytest.mark.parametrize(
    "spoil",
    [
        lambda d: d.pop("schema"),
        lambda d: d["sites"][0].pop("correlation"),
        lambda d: d["sites"][0]["estimates"][0].update(u=None),
        lambda d: d["sites"][0]["estimates"][0].update(u=d["sites"][0]["estimates"][0]["u"] * 1.001),
        lambda d: d["sites"][0]["estimates"][0].update(value=float("nan")),
        lambda d: d["sites"][0]["readings"][0].update(used="yes"),
        lambda d: d["sites"][0].update(status="fine"),
    ],
)
def test_contract_check_can_fail(spoil):
    """A document with one thing wrong does not pass the check."""
    document = copy.deepcopy(results_document(fixtures.good()))
    spoil(document)
    with pytest.raises(ContractError):
        check_document(document)


@pytest.mark.parametrize("field", ["value", "u", "u_random", "u_shared", "low95", "high95"])
@pytest.mark.parametrize("wrong", [float("nan"), float("inf")])
def test_no_estimate_without_uncertainty(field, wrong):
    """A number that is not finite throughout stops the report and is named."""
    result = fixtures.bare()
    site = result.sites[0]
    spoilt = dataclasses.replace(site.estimates[0], **{field: wrong})
    bad = dataclasses.replace(site, estimates=(spoilt, *site.estimates[1:]))
    with pytest.raises(BareNumberError, match="the whole table: index of nitride") as caught:
        results_document(dataclasses.replace(result, sites=(bad,)))
    assert len(caught.value.found) == 1


def test_missing_statistics_are_null():
    """A p-value that does not exist is null, never NaN."""
    result = fixtures.bare()
    fit = dataclasses.replace(result.sites[0].fit, p_value=float("nan"))
    result = dataclasses.replace(result, sites=(dataclasses.replace(result.sites[0], fit=fit),))
    assert '"p_value": null' in document_text(results_document(result))


def test_one_site_a_line():
    """The file can be searched by line: one line a site."""
    text = document_text(results_document(fixtures.good()))
    assert sum(line.startswith('{"lot"') for line in text.splitlines()) == 10
