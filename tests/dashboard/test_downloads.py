"""Figures as files: complete without the page, and the same numbers as the synthesis."""

import csv
import io
import math
from xml.etree import ElementTree

import pytest

from analysis.answers import answer_at
from evidence.models import EvidenceBase
from evidence.moments import resolve_moment
from tests.register import a_base, a_paper, a_question, an_estimate, ready_made

pytestmark = pytest.mark.django_db

SVG = "{http://www.w3.org/2000/svg}"


def _read(response) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(response.content.decode(), newline="")))


def _synthesis(answered, as_of=None):
    base = answered.evidence_base
    return answer_at(base, "messages", resolve_moment(base, as_of)).synthesis


def _change(ratio: float) -> float:
    """A log ratio as the percentage by which the ratio differs from 1."""
    return 100 * (math.exp(ratio) - 1)


@pytest.mark.parametrize("name", ["trail-svg", "forest-svg"])
def test_an_svg_is_a_complete_file(answered, look, name):
    response = look(answered.access, name, "messages")
    assert response["Content-Type"] == "image/svg+xml; charset=utf-8"
    newest = EvidenceBase.objects.get(pk=answered.evidence_base.pk).last_change
    kind = name.removesuffix("-svg")
    assert response["Content-Disposition"] == f'attachment; filename="messages-{kind}-change-{newest}.svg"'
    root = ElementTree.fromstring(response.content)
    assert root.tag == SVG + "svg"
    assert root.find(SVG + "style") is not None
    assert "var(--" not in response.content.decode()
    assert f"as of change {newest}" in "".join(root.itertext())


def test_the_trail_as_csv_is_the_stored_trail(answered, look):
    rows = _read(look(answered.access, "trail-csv", "messages"))
    steps = _synthesis(answered).trail
    assert [row["date"] for row in rows] == [step["published_from"] for step in steps]
    for row, step in zip(rows, steps, strict=True):
        # 1e-9: the repository's own bound for closed forms; one exponential stands between the two.
        assert float(row["pooled_effect"]) == pytest.approx(_change(step["value"]), rel=1e-9)
        assert float(row["interval_low"]) == pytest.approx(_change(step["low"]), rel=1e-9)
        assert int(row["papers"]) == step["papers"]
        known = step["prediction_low"] is not None
        assert (row["prediction_low"] != "") == known


def test_the_forest_as_csv_is_the_stored_rows(answered, look):
    rows = _read(look(answered.access, "forest-csv", "messages"))
    stored = _synthesis(answered).rows
    assert [row["paper"] for row in rows][-2:] == ["Pooled effect", "One new setting"]
    for row, effect in zip(rows, stored, strict=False):
        assert float(row["effect"]) == pytest.approx(_change(effect["value"]), rel=1e-9)
        assert float(row["weight"]) == effect["weight"]
        # The two-sided 95 % point of the normal distribution, 1.959964 (any table).
        low = _change(effect["value"] - 1.959963984540054 * effect["standard_error"])
        assert float(row["interval_low"]) == pytest.approx(low, rel=1e-9)
    assert sum(float(row["weight"]) for row in rows if row["weight"]) == pytest.approx(1, rel=1e-12)


def test_a_file_of_the_past_holds_the_past(answered, look):
    before = EvidenceBase.objects.get(pk=answered.evidence_base.pk).last_change - 1
    response = look(answered.access, "trail-csv", "messages", as_of=before)
    assert len(_read(response)) == 2
    assert f"change-{before}.csv" in response["Content-Disposition"]


def test_labels_cannot_become_formulas(db, silent_queue, look):
    access = a_base()
    question = a_question(access)
    a_paper(access, an_estimate(ready_made()), label="=HYPERLINK(1)")
    newest = EvidenceBase.objects.get(pk=access.evidence_base.pk).last_change
    from analysis.answers import compute_answer

    compute_answer(question, newest)
    for name, column in (("forest-csv", "paper"), ("trail-csv", "papers_entering")):
        assert _read(look(access, name, "messages"))[0][column] == "'=HYPERLINK(1)"
