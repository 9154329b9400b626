"""The study form: units, conditions, bounds, and every refusal at the entry it is about."""

from typing import Any

import pytest
from playwright.sync_api import Page, expect

from solver.experiment import Study
from tests.browser.watching import Watch
from tests.serving import LiveServer


@pytest.fixture
def form(page: Page) -> Page:
    """The bench with every section of the form open and the server's defaults in it."""
    page.goto("/")
    page.wait_for_selector("[data-run]:not([disabled])")
    page.evaluate(
        "document.querySelectorAll('.stage, .rare').forEach((part) => { part.open = true; })"
    )
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


def test_the_stages_stand_in_the_order_in_which_the_light_meets_them(form: Page) -> None:
    titles = form.locator(".stage-title").all_inner_texts()
    assert titles == [
        "Source",
        "Relation",
        "Shaper",
        "Booster",
        "Launch",
        "Line",
        "Preamplifier",
        "Receiver",
        "Ensemble",
        "Sweep",
        "Second sweep",
        "Variants",
    ]
    for stage in ("shaper", "booster", "preamplifier"):
        expect(form.locator(f'[data-summary="{stage}"]')).to_have_text("off")


def test_an_effect_is_named_when_on_and_switched_off_and_on_again(form: Page) -> None:
    _entry(form, "experiment.launch.pdl_db").fill("1.5")
    summary = form.locator('[data-summary="launch"]')
    expect(summary).to_contain_text("polarization-dependent loss 1.5 dB")
    switch = form.locator('[data-switch="experiment.launch.pdl_db"]')
    switch.click()
    expect(summary).not_to_contain_text("loss")
    expect(_entry(form, "experiment.launch.pdl_db")).to_have_value("0")
    switch.click()
    expect(_entry(form, "experiment.launch.pdl_db")).to_have_value("1.5")


def test_a_whole_stage_is_switched_off_and_on_again(form: Page, watch: Watch) -> None:
    watch.expect("ERR_FAILED")
    _entry(form, "experiment.booster.noise_figure_db").fill("5")
    _entry(form, "experiment.booster.bandpass_ghz").fill("120")
    summary = form.locator('[data-summary="booster"]')
    expect(summary).to_contain_text("noise figure 5 dB")
    switch = form.locator('[data-stage-switch="booster"]')
    switch.click()
    expect(summary).to_have_text("off")
    assert _asked(form) == Study().model_dump(mode="json")
    switch.click()
    expect(summary).to_contain_text("optical band-pass 120 GHz")
    assert _asked(form)["experiment"]["booster"]["noise_figure_db"] == 5.0


def test_a_kind_of_fibre_fills_a_span_and_says_where_its_figures_come_from(
    form: Page, lab: LiveServer, watch: Watch
) -> None:
    watch.expect("ERR_FAILED")
    kind = lab.get("/api/fibres", params={"wavelength_nm": 1552.0})["kinds"][0]
    choice = form.locator("[data-fibre-kind]")
    expect(choice).to_be_visible()
    choice.select_option(kind["key"])
    span = _asked(form)["experiment"]["line"][0]
    assert span["length_km"] == 8.0
    assert {name: span[name] for name in kind["span"] if name != "length_km"} == {
        name: value for name, value in kind["span"].items() if name != "length_km"
    }
    expect(form.locator("[data-fibre-source]")).to_contain_text(kind["source"].rstrip("."))
    _entry(form, "experiment.line.0.gamma_per_w_km").fill("9.87")
    expect(choice).to_have_value("")


def test_a_second_sweep_is_added_and_removed(form: Page, watch: Watch) -> None:
    watch.expect("ERR_FAILED")
    form.locator("[data-second-switch]").click()
    _entry(form, "second.parameter").select_option("source.width_ghz")
    expect(_entry(form, "second.start")).to_have_value("12")
    expect(form.locator('[data-summary="second"]')).to_contain_text("width, 12 to 48 GHz")
    assert _asked(form)["second"]["parameter"] == "source.width_ghz"
    form.locator("[data-second-switch]").click()
    expect(form.locator('[data-summary="second"]')).to_have_text("none")
    assert _asked(form).get("second") is None


def test_the_grid_is_chosen_on_demand_with_its_reasons(form: Page) -> None:
    form.locator("[data-plan]").click()
    reasons = form.locator("[data-plan-reasons] li")
    expect(reasons.first).to_contain_text("samples of")
    assert reasons.count() > 1
    samples = int(_entry(form, "experiment.ensemble.samples").input_value())
    assert samples & (samples - 1) == 0


ANALYSER = "Wavelength (nm),Power (dBm)\n" + "".join(
    f"{1551.0 + i * 0.02:.2f},{-20.0 - (i - 50) ** 2 / 50:.2f}\n" for i in range(101)
)


def _import(page: Page, text: str) -> None:
    file = {"name": "analyser.csv", "mimeType": "text/csv", "buffer": text.encode()}
    page.locator("[data-spectrum-file]").set_input_files(file)  # type: ignore[arg-type]


def test_a_measured_spectrum_is_imported_shown_and_asked_for(form: Page, watch: Watch) -> None:
    watch.expect("ERR_FAILED")
    expect(form.locator("[data-spectrum]")).to_be_hidden()
    _entry(form, "experiment.source.shape").select_option("measured")
    _import(form, ANALYSER)
    expect(form.locator("[data-spectrum-preview] svg")).to_be_visible()
    expect(form.locator("[data-spectrum-about]")).to_contain_text("analyser.csv")
    expect(form.locator('[data-summary="source"]')).to_contain_text("measured (analyser.csv)")
    source = _asked(form)["experiment"]["source"]
    assert source["shape"] == "measured"
    assert len(source["measured"]["density"]) == len(source["measured"]["offset_ghz"]) > 50


def test_a_spectrum_that_cannot_be_read_is_refused_with_its_line(form: Page, watch: Watch) -> None:
    watch.expect("422")
    _entry(form, "experiment.source.shape").select_option("measured")
    _import(form, ANALYSER.replace("-20.00", "loud", 1))
    fault = _fault(form, "experiment.source.measured")
    expect(fault).to_contain_text("52")
    expect(form.locator("[data-spectrum-preview]")).to_be_hidden()


def test_a_spectrum_may_be_dropped_on_the_form(form: Page) -> None:
    _entry(form, "experiment.source.shape").select_option("measured")
    form.locator("[data-drop]").evaluate(
        """(box, text) => {
            const dataTransfer = new DataTransfer();
            dataTransfer.items.add(new File([text], "dropped.csv", { type: "text/csv" }));
            box.dispatchEvent(new DragEvent("drop", { dataTransfer, cancelable: true }));
        }""",
        ANALYSER,
    )
    expect(form.locator("[data-spectrum-about]")).to_contain_text("dropped.csv")
