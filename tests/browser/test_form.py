"""The study form: units, conditions, bounds, and every refusal at the entry it is about."""

from typing import Any

import pytest
from playwright.sync_api import Page, expect

from solver.experiment import Study
from tests.browser.watching import Watch


@pytest.fixture
def form(page: Page) -> Page:
    """The bench with every section of the form open and the server's defaults in it."""
    page.goto("/")
    page.wait_for_selector("[data-run]:not([disabled])")
    page.evaluate("document.querySelectorAll('.stage').forEach((stage) => { stage.open = true; })")
    return page


def _asked(page: Page) -> Any:
    """The study that pressing Run would ask for; nothing is run."""
    page.route("**/api/runs", lambda route: route.abort())
    with page.expect_request("**/api/runs") as sent:
        page.locator("[data-run]").click()
    page.unroute("**/api/runs")
    return sent.value.post_data_json


def _entry(page: Page, path: str) -> Any:
    return page.locator(f'[data-path="{path}"]')


def _fault(page: Page, path: str) -> Any:
    return page.locator(f'[data-fault-for="{path}"]')


def test_untouched_it_asks_for_the_headline_study(form: Page, watch: Watch) -> None:
    watch.expect("ERR_FAILED")
    assert _asked(form) == Study().model_dump(mode="json")


def test_every_parameter_has_an_entry_with_label_and_help(form: Page) -> None:
    for path, entry in (
        ("source.width_ghz", "Full width at half maximum"),
        ("line.0.gamma_per_w_km", "Kerr coefficient"),
        ("receiver.filter", "Response of photodiode"),
        ("ensemble.seed", "Fixes every random draw"),
    ):
        field = form.locator(f'[data-field="experiment.{path}"]')
        expect(field.locator("label").first).not_to_be_empty()
        expect(field.locator(".help")).to_contain_text(entry)
    expect(form.locator('[data-field="experiment.source.width_ghz"] .bounds')).to_have_text(
        "0.1 to 5000 GHz"
    )


@pytest.mark.parametrize(
    ("path", "text", "complaint"),
    [
        ("experiment.source.width_ghz", "-3", "from 0.1 to 5000 GHz"),
        ("experiment.source.width_ghz", "wide", "is not a number"),
        ("experiment.ensemble.seed", "1.5", "whole number"),
        ("experiment.line.0.length_km", "", "Give a number"),
    ],
)
def test_a_fault_is_told_where_it_is_typed(
    form: Page, path: str, text: str, complaint: str
) -> None:
    _entry(form, path).fill(text)
    expect(_fault(form, path)).to_contain_text(complaint)
    expect(_entry(form, path)).to_have_attribute("aria-invalid", "true")
    form.locator("[data-run]").click()
    expect(_entry(form, path)).to_be_focused()
    assert form.url.endswith("/")


@pytest.mark.parametrize(
    ("path", "text", "at", "advice"),
    [
        ("experiment.ensemble.samples", "5000", "experiment.ensemble.samples", "power of two"),
        ("experiment.source.width_ghz", "900", "experiment.ensemble.samples", "does not fit"),
        ("experiment.line.0.pmd_ps_per_sqrt_km", "0.1", "variants", "uncoupled|manakov"),
        ("sweep.points", "9000", "sweep", "480"),
        ("sweep.start", "0.000002", "sweep", ""),
    ],
)
def test_what_the_server_refuses_is_told_at_its_entry(
    form: Page, watch: Watch, path: str, text: str, at: str, advice: str
) -> None:
    if path == "sweep.start":
        _entry(form, "sweep.stop").fill(text)
    watch.expect("422")
    _entry(form, path).fill(text)
    form.locator("[data-run]").click()
    faults = form.locator(f'.fault[data-fault-for^="{at}"]:visible')
    expect(faults.first).to_be_visible()
    said = faults.first.inner_text()
    assert any(words in said for words in advice.split("|")), said
    expect(form.locator("[data-fault-general]")).to_be_hidden()


def test_power_is_typed_in_dbm_or_mw_as_one_likes(form: Page, watch: Watch) -> None:
    watch.expect("ERR_FAILED")
    form.get_by_role("radio", name="dBm").check()
    expect(_entry(form, "sweep.start")).to_have_value("6.9897")
    expect(form.locator('[data-summary="sweep"]')).to_contain_text("6.99 dBm to 29 dBm")
    assert _asked(form) == Study().model_dump(mode="json")
    _entry(form, "sweep.stop").fill("20")
    assert _asked(form)["sweep"]["stop"] == 100.0
    form.reload()
    form.wait_for_selector("[data-run]:not([disabled])")
    expect(_entry(form, "sweep.start")).to_have_value("6.9897")


def test_parameters_appear_when_they_apply(form: Page, watch: Watch) -> None:
    watch.expect("ERR_FAILED")
    order = form.locator('[data-field="experiment.source.order"]')
    expect(order).to_be_hidden()
    _entry(form, "experiment.source.shape").select_option("super_gaussian")
    expect(order).to_be_visible()
    _entry(form, "experiment.source.order").fill("3")
    _entry(form, "experiment.source.shape").select_option("gaussian")
    expect(order).to_be_hidden()
    assert _asked(form) == Study().model_dump(mode="json")
    delay = form.locator('[data-field="experiment.relation.delay_ps"]')
    expect(delay).to_be_hidden()
    form.locator("[data-variants] [data-relation]").first.select_option("delayed")
    expect(delay).to_be_visible()


def test_dispersion_is_given_as_d_or_as_beta2(form: Page, watch: Watch) -> None:
    watch.expect("ERR_FAILED")
    d = _entry(form, "experiment.line.0.dispersion_ps_per_nm_km")
    beta2 = _entry(form, "experiment.line.0.beta2_ps2_per_km")
    expect(beta2).to_have_attribute("placeholder", "= 16.62")
    beta2.fill("20")
    expect(d).to_have_value("")
    span = _asked(form)["experiment"]["line"][0]
    assert (span["dispersion_ps_per_nm_km"], span["beta2_ps2_per_km"]) == (None, 20.0)


def test_spans_are_added_put_in_order_and_removed(form: Page, watch: Watch) -> None:
    watch.expect("ERR_FAILED")
    form.locator("[data-add-span]").click()
    _entry(form, "experiment.line.1.length_km").fill("3")
    form.locator('[data-spans] [data-act="up"]').nth(1).click()
    lengths = [span["length_km"] for span in _asked(form)["experiment"]["line"]]
    assert lengths == [3.0, 8.0]
    expect(form.locator('[data-summary="line"]')).to_contain_text("2 spans, 11 km")
    form.locator('[data-spans] [data-act="remove"]').nth(1).click()
    assert [span["length_km"] for span in _asked(form)["experiment"]["line"]] == [3.0]


def test_variants_are_added_changed_and_removed(form: Page, watch: Watch) -> None:
    watch.expect("ERR_FAILED")
    form.locator('[data-variants] [data-act="remove"]').first.click()
    form.locator("[data-add-variant]").click()
    item = form.locator("[data-variants] [data-item]").last
    item.locator("[data-name]").fill("steeper source")
    item.locator('[data-act="change"]').click()
    item.locator("[data-change-path]").select_option("source.shape")
    item.locator("[data-change-value]").fill("rectangular")
    variants = _asked(form)["variants"]
    assert [variant["name"] for variant in variants] == [
        "derivative",
        "derivative, coupling off",
        "steeper source",
    ]
    assert variants[2]["changes"] == {
        "relation.kind": "derivative",
        "line.*.coupling": "uncoupled",
        "source.shape": "rectangular",
    }


def test_another_swept_parameter_brings_its_own_unit_and_range(form: Page) -> None:
    _entry(form, "sweep.parameter").select_option("line.*.length_km")
    expect(_entry(form, "sweep.start")).to_have_value("4")
    expect(_entry(form, "sweep.stop")).to_have_value("16")
    expect(form.locator('[data-field="sweep.start"] [data-unit]')).to_have_text("km")
