"""The auditor's page and its short form: what ran, what it found, what was off, what was tampered with."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import pandas as pd
import pytest
from click.testing import CliRunner
from rich.console import Console

from checks.assess import assess
from checks.gates import GATES, resolve_limits
from checks.gates.gate import GateInput
from flows.cli.root import EXIT_ATTENTION, EXIT_WRONG_USE, tree
from flows.history.gate_audit import audit_record
from flows.history.gate_page import gate_page, gate_summary
from flows.history.gate_record import AuditRecord, Scope, rule_text
from flows.overnight.report import PassReport
from flows.stages.gate_runs import BATCH, gates_off, keep_runs, read_run
from flows.stages.load import load_results
from flows.stages.publish import publish_results
from models.errors import QueryError
from models.identity import content_id
from models.tables import RATES
from tests.flows.tiny_site import FIRST_NIGHT, HELD, TinySite, tiny_recipe, tiny_site

HOSTILE = "<script>alert(1)</script>\u202e"


class Reader(HTMLParser):
    """Collects tags, links and the text that a reader sees."""

    def __init__(self, page: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.text: list[str] = []
        self.feed(page)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        while self.open and self.open.pop() != tag:
            pass

    def handle_data(self, data: str) -> None:
        if "style" not in self.open:
            self.text.append(data)

    @property
    def seen(self) -> str:
        return " ".join(" ".join(self.text).split())


@pytest.fixture(scope="module")
def judged(tmp_path_factory: pytest.TempPathFactory) -> TinySite:
    """The tiny site with a real gate run over the second plate's wells, blank_drift off."""
    made = tiny_site(tmp_path_factory.mktemp("gates"))
    limits = resolve_limits({}, {"blank_drift": {"on": False}, "substrate_depletion": {"limit": 0.07}})
    recipe = replace(tiny_recipe(), limits=limits)
    analysis_id = made.analysis_ids["TP-2"]
    wells = [f"A{column}" for column in range(1, 5)]
    frame = pd.DataFrame({"analysis_id": analysis_id, "well": wells, "role": "sample", "substrate_um": 10.0})
    rates = RATES.empty().reindex(range(4)).assign(analysis_id=analysis_id, well=wells)
    rates["shape"] = "straight"
    rates["conversion"] = rates["shortest_conversion"] = [0.01, 0.05, None, 0.21]
    rates["v0_um_per_s"], rates["blank_source"], rates["window_point_count"] = 0.1, "none", 5
    reads = pd.DataFrame(
        {
            "analysis_id": analysis_id,
            "well": "A1",
            "read_number": [1, 2],
            "time_s": [0.0, 10.0],
            "signal": 0.1,
        }
    ).assign(state="ok", product_um=0.0)
    analyses = pd.DataFrame(
        {"analysis_id": [analysis_id], "recipe_id": [recipe.recipe_id], "assay": ["tiny"]}
    )
    data = GateInput(
        analyses, frame.assign(series_id=None), reads, rates, assays={recipe.recipe_id: recipe.assay}
    )
    chosen = {name: GATES[name] for name in ("substrate_depletion",)}
    ran = assess("wells", data, {recipe.recipe_id: limits}, chosen)
    at = FIRST_NIGHT.replace(day=20)
    rows = keep_runs(made.site, "pass-2", ran.runs, [analysis_id])
    load_results(made.site, "pass-2", {"recipes": pd.DataFrame([recipe.row()]), "gate_runs": rows}, at)
    from flows.warehouse.writer import loader

    with loader(made.site) as connection:
        connection.execute(
            "UPDATE analyses SET recipe_id = ? WHERE analysis_id = ?", [recipe.recipe_id, analysis_id]
        )
        connection.execute("DELETE FROM gate_runs WHERE file = 'lake/gate_documents/none.json'")
        connection.execute(
            "UPDATE findings SET sentence = ? WHERE gate = 'blank_drift'", [f"Drift {HOSTILE}"]
        )
    publish_results(made.site, at)
    return made


@pytest.fixture(scope="module")
def record(judged: TinySite) -> AuditRecord:
    return audit_record(judged.site, Scope(pass_id="pass-2"))


@pytest.fixture(scope="module")
def page(record: AuditRecord) -> Reader:
    return Reader(gate_page(record))


def documents(made: TinySite) -> list[Path]:
    return sorted(made.site.gate_documents.glob("*.json"))


@pytest.fixture
def tampered(judged: TinySite) -> Iterator[Path]:
    """A document whose bytes the test may change; it is put back afterwards."""
    (path,) = documents(judged)
    content = path.read_bytes()
    path.chmod(0o644)
    yield path
    path.write_bytes(content)


def test_a_rule_is_shown_with_the_limit_that_ran_and_what_it_ran_on(
    record: AuditRecord, page: Reader
) -> None:
    (recipe,) = record.recipes
    gate = next(each for each in recipe.gates if each.name == "substrate_depletion")
    (run,) = gate.runs
    assert (run.suite, run.row_count, run.unassessed_count) == ("wells.well", 4, 1)
    (rule,) = run.rules
    assert (rule.text, rule.measured_count, rule.flagged_count) == ("conversion at most 0.07", 3, 1)
    assert "conversion at most 0.07" in page.seen
    assert "(default 0.1)" in page.seen
    assert recipe.recipe_id in page.seen
    assert recipe.code_version in page.seen
    # The second night of the tiny site, as its passes have it.
    assert "from 2026-03-10 05:00:00 UTC to 2026-03-10 05:03:00 UTC" in page.seen


def test_findings_are_told_in_their_sentences_with_their_place(page: Reader) -> None:
    assert f"{HELD[0]}, well {HELD[1]} 21 % of the substrate was consumed." in page.seen


def test_gates_that_were_off_are_named_first_and_where_they_would_stand(
    record: AuditRecord, page: Reader
) -> None:
    assert record.off == {"blank_drift": ("tiny",)}
    assert "1 gate was turned off: nothing was held against it. blank_drift in tiny" in page.seen
    assert "blank_drift is off" in page.seen


def test_the_page_stands_alone(record: AuditRecord, page: Reader) -> None:
    tags = [tag for tag, _ in page.tags]
    assert not {"script", "link", "img", "iframe", "object", "form"} & set(tags)
    links = [
        value for _, given in page.tags for name, value in given.items() if name in ("href", "src", "action")
    ]
    assert links
    assert all(each is not None and each.startswith("#") for each in links)
    ids = {given["id"] for _, given in page.tags if "id" in given}
    assert {str(each)[1:] for each in links} <= ids
    assert "url(" not in gate_page(record)
    assert "@import" not in gate_page(record)
    assert not any(name.startswith("on") for _, given in page.tags for name in given)


def test_what_comes_from_files_is_escaped_and_cannot_turn_the_writing(
    record: AuditRecord, page: Reader
) -> None:
    text = gate_page(record)
    assert "<script" not in text
    assert "&lt;script&gt;alert(1)&lt;/script&gt;" in text
    assert "\u202e" not in text
    assert "Drift <script>alert(1)</script>\ufffd" in page.seen


def test_the_digest_of_every_document_is_that_of_its_bytes(judged: TinySite, page: Reader) -> None:
    for path in documents(judged):
        assert content_id(path.read_bytes()) in page.seen
        assert path.name in page.seen
    assert "as written" in page.seen


def test_the_same_site_gives_the_same_page(judged: TinySite, record: AuditRecord) -> None:
    again = audit_record(judged.site, Scope(pass_id="pass-2"))
    assert gate_page(again) == gate_page(record)


@pytest.mark.parametrize("change", ["limit", "cut", "batch", "no batch", "a list"])
def test_a_changed_document_is_told_and_what_it_says_is_not_shown(
    judged: TinySite, tampered: Path, change: str
) -> None:
    content = tampered.read_bytes()
    document = json.loads(content)
    if change == "limit":
        tampered.write_bytes(content.replace(b'"max_value":0.07', b'"max_value":0.7'))
    elif change == "cut":
        tampered.write_bytes(content[:-20])
    elif change == "batch":
        tampered.write_text(json.dumps({**document, BATCH: ["another"]}))
    elif change == "no batch":
        tampered.write_text(json.dumps({key: value for key, value in document.items() if key != BATCH}))
    else:
        tampered.write_text("[]")
    record = audit_record(judged.site, Scope(pass_id="pass-2"))
    assert [each.condition for each in record.broken] == ["changed"]
    seen = Reader(gate_page(record)).seen
    assert "1 document below the lake is not what was written" in seen
    assert "conversion at most" not in seen
    assert "changed since it was written" in seen
    done = CliRunner().invoke(tree, ["gates", "--site", str(judged.site.root), "--pass", "pass-2"])
    assert done.exit_code == EXIT_ATTENTION
    assert "changed since it was written" in " ".join(done.output.split())


def test_a_document_is_read_only_as_the_run_that_it_is(judged: TinySite) -> None:
    """Its bytes are unchanged, but another run's row points at it: it vouches for nothing."""
    (path,) = documents(judged)
    file = f"lake/gate_documents/{path.name}"
    run = (path.stem, "wells.well", json.loads(path.read_bytes())["recipe_id"])
    assert read_run(judged.site, *run, file).condition == "unchanged"
    assert read_run(judged.site, *run, "lake/gate_documents").condition == "missing"
    for place, other in enumerate(("0" * 32, "series.series", "another recipe")):
        kept = read_run(judged.site, *(other if k == place else each for k, each in enumerate(run)), file)
        assert (kept.condition, kept.document) == ("changed", None)


def test_a_missing_document_is_told(tmp_path: Path) -> None:
    made = tiny_site(tmp_path)
    record = audit_record(made.site)
    assert record.about == "pass pass-2"
    assert [each.condition for each in record.broken] == ["missing"]
    assert "1 document below the lake is not what was written" in Reader(gate_page(record)).seen


def test_scopes_choose_a_pass_an_analysis_or_a_plate(judged: TinySite) -> None:
    by_plate = audit_record(judged.site, Scope(plate_id="TP-2"))
    assert by_plate.about == "plate TP-2, current results"
    by_id = audit_record(judged.site, Scope(analysis_id=judged.analysis_ids["TP-2"][:8]))
    assert by_id.recipes == by_plate.recipes
    assert by_plate.partial
    assert "count the whole runs" in Reader(gate_page(by_plate)).seen
    latest = audit_record(judged.site)
    assert latest.about == "pass pass-2"
    first = audit_record(judged.site, Scope(pass_id="pass-1"))
    assert [plate.plate_id for recipe in first.recipes for plate in recipe.plates] == ["TP-1"]
    assert first.told_count == 0


@pytest.mark.parametrize(
    ("scope", "what"),
    [
        (Scope(pass_id="nothing"), "there is no pass"),
        (Scope(pass_id="pass-"), "several pass ids"),
        (Scope(analysis_id="ff"), "too short"),
        (Scope(plate_id="TP-9"), "no plate 'TP-9'"),
    ],
)
def test_what_is_not_there_is_refused_with_a_remedy(judged: TinySite, scope: Scope, what: str) -> None:
    with pytest.raises(QueryError, match=what) as refused:
        audit_record(judged.site, scope)
    assert refused.value.remedy


def test_the_terminal_holds_at_80_columns(judged: TinySite) -> None:
    done = CliRunner().invoke(tree, ["gates", "--site", str(judged.site.root)])
    assert done.exit_code == 0, done.output
    assert max(len(line) for line in done.output.splitlines()) <= 80
    row = next(line for line in done.output.splitlines() if "substrate_depletion" in line)
    assert re.sub(r"\s+", " ", row).strip() == "◐ substrate_depletion 0.07 3 1 1 1"
    assert "Gates off: blank_drift" in done.output
    assert "halfsat gates --output gates.html" in done.output


def test_output_writes_the_page(judged: TinySite, record: AuditRecord, tmp_path: Path) -> None:
    out = tmp_path / "gates.html"
    words = ["gates", "--site", str(judged.site.root), "--pass", "pass-2", "--output", str(out)]
    done = CliRunner().invoke(tree, words)
    assert done.exit_code == 0, done.output
    assert out.read_text(encoding="utf-8") == gate_page(record)


def test_two_scopes_at_once_are_wrong_use(judged: TinySite) -> None:
    words = ["gates", "--site", str(judged.site.root), "--pass", "pass-2", "--plate", "TP-2"]
    assert CliRunner().invoke(tree, words).exit_code == EXIT_WRONG_USE


def test_every_rule_of_every_gate_has_a_text_with_its_limit() -> None:
    """Texts are made from expectations as they are stored; none may lose its number."""
    from great_expectations.core import ExpectationSuite

    limits = resolve_limits({}, {})
    for gate in GATES.values():
        for subject in gate.subjects:
            rules = gate.expectations(limits, subject)
            for stored in ExpectationSuite(name="s", expectations=rules).to_json_dict()["expectations"]:
                text = rule_text(stored)
                assert "__" not in text
                assert re.search(r"\d", text) or " is not " in text, (gate.name, text)


def test_gates_off_reads_the_switches() -> None:
    limits = resolve_limits({"blank_drift": {"on": False}}, {"control_window": {"on": False}})
    assert set(gates_off(limits)) == {"blank_drift", "control_window"}
    assert gates_off(resolve_limits({}, {})) == ()


def test_the_report_of_a_pass_says_which_gates_were_off() -> None:
    at = FIRST_NIGHT
    off = (("a", ("blank_drift", "control_window")), ("b", ("blank_drift",)), ("b", ("blank_drift",)))
    report = PassReport("p", at, at, 0, 0, gates_off=off)
    assert report.gates_off_text() == "blank_drift (in a, b); control_window (in a)"
    assert PassReport("p", at, at, 0, 0).gates_off_text() == "none"


def test_the_summary_can_be_printed_anywhere(record: AuditRecord) -> None:
    console = Console(width=80, color_system=None)
    with console.capture() as captured:
        console.print(gate_summary(record))
    assert "substrate_depletion" in captured.get()
