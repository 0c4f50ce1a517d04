"""What is expected of every fixture patient, in short. `python tests/expectations.py` writes it anew, to be read before a commit."""

from __future__ import annotations

import json
import sys
from datetime import UTC
from pathlib import Path
from typing import Any

from cds.assessment import assess, check_orders
from cds.content.load import load_content
from cds.fhir.dates import parse_as_of

PATIENTS = Path(__file__).parent.parent / "fixtures" / "patients"
AS_OF = "2026-03-01"


def expectation(folder: Path) -> dict[str, Any]:
    """Findings, cards and issues of a fixture as of its day; with drafts in the bundle also the answer about them."""
    data = (folder / "bundle.json").read_bytes()
    as_of = parse_as_of(AS_OF, UTC)
    whole = assess(data, load_content(), as_of=as_of, trace=True)
    found: dict[str, Any] = {
        "as_of": AS_OF,
        "assessments": [_assessment(one) for one in whole["assessments"]],
        "issues": [_issue(issue) for issue in whole["issues"]],
    }
    if b'"draft"' in data:
        checks = check_orders(data, load_content(), as_of=as_of)["checks"]
        found["order_checks"] = [_check(one) for one in checks]
    return found


def _assessment(one: dict[str, Any]) -> dict[str, Any]:
    return {
        "patient": one["patient"],
        "phenotype": one["phenotype"]["kind"],
        "gates": [gate["id"] for gate in one["gates"]],
        "findings": {
            f"{f['rule']}{' about ' + f['about'] if f['about'] else ''}": f["outcome"]
            + (f"/{f['action']}" if f["action"] else "")
            for f in one["findings"]
            if f["outcome"] != "not-applicable"
        },
        "cards": [_card(card) for card in one["cards"]],
        "held_back": len(one["held_back"]),
        "issues": [_issue(issue) for issue in one["intake"]["issues"]],
    }


def _check(one: dict[str, Any]) -> dict[str, Any]:
    return {
        "patient": one["patient"],
        "orders": [{**order, "cards": [_card(card) for card in order["cards"]]} for order in one["orders"]],
        "cards": [_card(card) for card in one["cards"]],
        "held_back": len(one["held_back"]),
    }


def _card(card: dict[str, Any]) -> str:
    drafts = [draft.get("medicationCodeableConcept", draft.get("code", {})).get("text", "") for draft in card["drafts"]]
    return f"{card['tier']}: {card['headline']}{' [' + ', '.join(drafts) + ']' if drafts else ''}"


def _issue(issue: dict[str, Any]) -> str:
    return f"{issue['severity']}: {issue['resource']}: {issue['path']} {issue['problem']}"


def main() -> None:
    for folder in sorted(PATIENTS.iterdir()):
        file = folder / "expected.json"
        why = json.loads(file.read_text(encoding="utf-8"))["why"] if file.exists() else ""
        file.write_text(
            json.dumps({"why": why, **expectation(folder)}, indent=1, ensure_ascii=False) + "\n", encoding="utf-8"
        )
    sys.stdout.write("Written. Read what changed before you commit it.\n")


if __name__ == "__main__":
    main()
