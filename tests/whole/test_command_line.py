"""The command as a person or a script meets it: what goes in, what comes out where, and with which exit code."""

from __future__ import annotations

import gzip
import json
import os
import re
import subprocess
import sys
from pathlib import Path

import orjson
import pytest
from asking import assessment_of
from builders import bundle, creatinine, lvef, observation, patient, potassium, problem
from click.testing import CliRunner
from random_patients import FIXTURES, written_patients

from cds import __version__
from cds.cli import main

HOME = Path(__file__).parents[2]
BODY = bundle(
    patient(),
    problem("heart failure", "2024-01-15"),
    lvef(32, "2025-12-01"),
    potassium(4.4, "2026-02-20"),
    creatinine(1.0, "2026-02-20"),
)
WITH_A_REFUSAL = bundle(patient(), observation("potassium", "2823-3", 4.4, "furlongs", "2026-02-20"))
WITHOUT_PATIENT = bundle(potassium(4.4, "2026-02-20"))


def python(*arguments: str, stdin: bytes = b"", **environment: str) -> subprocess.CompletedProcess[bytes]:
    return subprocess.run(
        [sys.executable, *arguments],
        input=stdin,
        capture_output=True,
        check=False,
        cwd=HOME,
        env={**os.environ, **environment},
    )


def test_the_module_runs_as_the_command_and_reads_standard_input():
    run = python("-m", "cds", "assess", "-", "--as-of", "2026-03-01", "--trace", stdin=BODY)
    assert (run.returncode, run.stderr) == (0, b"")
    assert json.loads(run.stdout) == assessment_of(BODY, as_of="2026-03-01")
    assert run.stdout.endswith(b"}\n")


def test_two_processes_with_different_hash_seeds_print_the_same_bytes():
    file = str(FIXTURES / "messy-export" / "bundle.json")
    words = ("-m", "cds", "assess", file, "--as-of", "2026-03-01", "--trace")
    first, second = (python(*words, PYTHONHASHSEED=seed) for seed in ("1", "2"))
    assert first.stdout == second.stdout != b""


@pytest.mark.parametrize("words", [["--help"], ["-h"], ["assess", "--help"], ["record", "--help"]])
def test_help_explains_every_exit_code(words):
    shown = CliRunner().invoke(main, words)
    assert shown.exit_code == 0
    for code in ("0", "2", "10", "11", "12", "13", "20", "70"):
        assert re.search(rf"^\s+{code}\s+\w", shown.output, re.MULTILINE), f"exit code {code} is not explained"


def test_help_lists_every_command_with_a_line_of_its_own():
    shown = CliRunner().invoke(main, ["--help"]).output
    for name, made in main.commands.items():
        assert re.search(rf"^\s+{name}\s+\w.*[^.]\.$", shown, re.MULTILINE)  # whole, not cut off with dots
        assert made.help


def test_the_version_is_that_of_the_package():
    assert __version__ in CliRunner().invoke(main, ["--version"]).output


def test_assess_prints_the_documented_shape(command):
    run = command(BODY)
    answer = json.loads(run.stdout)
    assert run.exit_code == 0
    assert run.stderr == ""
    assert (answer["format"], answer["format_version"], answer["as_of"]) == (
        "gdmt-cards/assessment",
        "1.0",
        "2026-03-01",
    )
    (one,) = answer["assessments"]
    assert one["patient"] == "Patient/p1"
    assert set(one) == {"patient", "phenotype", "gates", "pillars", "cards", "held_back", "intake"}
    assert answer["content"]["signed_off"] is None


def test_trace_adds_every_finding(command):
    (one,) = json.loads(command(BODY, "assess", "--trace").stdout)["assessments"]
    assert {finding["outcome"] for finding in one["findings"]} >= {"unknown", "not-applicable"}


def test_record_prints_the_documented_shape(command):
    answer = json.loads(command(BODY, "record").stdout)
    assert (answer["format"], answer["format_version"], answer["as_of"]) == ("gdmt-cards/record", "1.0", "2026-03-01")
    (one,) = answer["records"]
    assert (one["patient"], one["sex"], one["age_years"]) == ("Patient/p1", "male", 58)
    assert [m["analyte"] for m in one["measurements"]] == ["creatinine", "potassium", "lvef"]


def test_a_compressed_bundle_and_a_byte_order_mark_make_no_difference(command):
    plain = command(BODY).stdout
    assert command(gzip.compress(BODY)).stdout == plain
    assert command(b"\xef\xbb\xbf" + BODY).stdout == plain


@pytest.mark.parametrize(
    ("as_of", "shown"),
    [
        ("2026-03-01", "2026-03-01"),
        ("2026-03-01T10:30:00Z", "2026-03-01T10:30:00+00:00"),
        ("2026-03-01T10:30:00+02:00", "2026-03-01T08:30:00+00:00"),
        ("2024-02-29", "2024-02-29"),
    ],
)
def test_the_moment_may_be_a_day_or_an_instant(command, as_of, shown):
    run = command(BODY, "assess", "--as-of", as_of)
    assert run.exit_code == 0
    assert json.loads(run.stdout)["as_of"] == shown


@pytest.mark.parametrize("as_of", ["2026-03", "2026", "yesterday", "2026-02-30", "2026-03-01T10:30", "01.03.2026", ""])
def test_a_moment_that_is_no_day_is_wrong_use_and_says_so(command, as_of):
    run = command(BODY, "assess", "--as-of", as_of)
    assert (run.exit_code, run.stdout) == (2, "")
    assert "--as-of" in run.stderr


def test_without_a_moment_the_clock_of_today_is_used(tmp_path):
    file = tmp_path / "bundle.json"
    file.write_bytes(BODY)
    run = CliRunner().invoke(main, ["assess", str(file)])
    assert run.exit_code == 0
    assert json.loads(run.stdout)["as_of"].endswith("+00:00")


def test_calendar_days_are_days_of_the_zone(command):
    """11 pm UTC is the next morning in Tokyo: the card's draft is written on that day."""
    instant = ("--as-of", "2026-03-01T23:00:00Z")
    written = [
        {draft["authoredOn"] for card in one["cards"] for draft in card["drafts"]}
        for zone in ("UTC", "Asia/Tokyo")
        for one in json.loads(command(BODY, "assess", *instant, "--zone", zone).stdout)["assessments"]
    ]
    assert written == [{"2026-03-01"}, {"2026-03-02"}]


def test_the_zone_may_come_from_the_environment(tmp_path):
    file = tmp_path / "bundle.json"
    file.write_bytes(BODY)
    words = ["assess", str(file), "--as-of", "2026-03-01T23:00:00Z"]
    shown = CliRunner().invoke(main, words, env={"GDMT_CARDS_ZONE": "Asia/Tokyo"})
    assert json.loads(shown.stdout)["as_of"] == "2026-03-02T08:00:00+09:00"


def test_without_a_zone_the_days_are_those_of_the_site_profile(tmp_path):
    file, profile = tmp_path / "bundle.json", tmp_path / "site.toml"
    file.write_bytes(BODY)
    profile.write_text('[site]\nname = "Tarnwick Lakes"\nversion = "1"\nzone = "Asia/Tokyo"\n')
    words = ["assess", str(file), "--as-of", "2026-03-01T23:00:00Z", "--site", str(profile)]
    for given, moment in (([], "2026-03-02T08:00:00+09:00"), (["--zone", "UTC"], "2026-03-01T23:00:00+00:00")):
        assert json.loads(CliRunner().invoke(main, [*words, *given]).stdout)["as_of"] == moment


@pytest.mark.parametrize("zone", ["Mars/Olympus", "../../etc/passwd", "", "/etc/localtime", "Europe"])
def test_a_zone_nobody_knows_is_wrong_use_and_says_what_would_be_right(command, zone):
    run = command(BODY, "assess", "--zone", zone)
    assert (run.exit_code, run.stdout) == (2, "")
    assert "Europe/Vienna" in run.stderr


@pytest.mark.parametrize("words", [["assess"], ["assess", "no-such-file.json"], ["assess", "."], ["asess", "-"]])
def test_wrong_use_gets_code_2_and_a_hint(words):
    run = CliRunner().invoke(main, words)
    assert run.exit_code == 2
    assert run.stdout == ""
    assert "--help" in run.stderr


def test_a_refused_value_is_an_issue_and_with_strict_an_error(command):
    for name in ("assess", "record"):
        lenient, strict = command(WITH_A_REFUSAL, name), command(WITH_A_REFUSAL, name, "--strict")
        assert (lenient.exit_code, strict.exit_code) == (0, 11)
        assert strict.stdout == lenient.stdout  # the answer is printed all the same
        assert '"refused"' in strict.stderr
    assert command(BODY, "assess", "--strict").exit_code == 0


def test_an_input_without_a_patient_gets_code_13_and_still_an_answer(command):
    for name, key in (("assess", "assessments"), ("record", "records")):
        run = command(WITHOUT_PATIENT, name)
        assert run.exit_code == 13
        answer = json.loads(run.stdout)
        assert answer[key] == []
        assert answer["issues"]
        assert "Patient" in run.stderr


@pytest.mark.parametrize("name", sorted(written_patients()))
def test_every_written_patient_gets_through_the_command(command, name):
    data, as_of = written_patients()[name]
    run = command(data, "assess", "--as-of", as_of)
    assert (run.exit_code, run.stderr) == (0, "")
    assert orjson.loads(run.stdout)["assessments"]
