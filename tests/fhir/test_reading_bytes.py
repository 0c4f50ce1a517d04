"""Bytes as they arrive: what is read, what is refused and with which way out. No error repeats what was sent."""

from __future__ import annotations

import gzip
import json
import time
import zlib
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from cds.errors import InputError, InputTooLargeError
from cds.fhir.reading import Limits, depth_of, read_json

LIMITS = Limits(max_bytes=100_000, max_entries=10, max_depth=200)
PATIENT = b'{"resourceType": "Patient", "id": "p1"}'


def zipped(data: bytes, level: int = 9) -> bytes:
    return gzip.compress(data, level, mtime=0)


MARK = "Zyxw987"  # stands for a patient's value: must never come back in an error


def refusal(data: bytes, limits: Limits = LIMITS) -> InputError:
    with pytest.raises(InputError) as caught:
        read_json(data, limits)
    assert MARK not in str(caught.value)
    assert caught.value.__cause__ is None
    assert caught.value.fix
    return caught.value


def patient_with(text: str) -> bytes:
    return b'{"resourceType": "Patient", "x": ' + text.encode() + b"}"


@pytest.mark.parametrize(
    "data",
    [
        PATIENT,
        b"\xef\xbb\xbf" + PATIENT,
        b"\n\t  " + PATIENT + b"\r\n",
        zipped(PATIENT),
        zipped(b"\xef\xbb\xbf" + PATIENT),
        zipped(PATIENT[:10]) + zipped(PATIENT[10:]),
        zipped(PATIENT[:10]) + zipped(b"") + zipped(PATIENT[10:]),
        zipped(PATIENT) + bytes(600),
    ],
    ids=["plain", "BOM", "white space", "gzip", "gzip of BOM", "two members", "an empty member", "zero padding"],
)
def test_one_resource_is_read_however_it_is_wrapped(data):
    assert read_json(data, LIMITS) == {"resourceType": "Patient", "id": "p1"}


@pytest.mark.parametrize("data", [b"", b" \n\t", b"\xef\xbb\xbf", zipped(b""), zipped(b"\n")])
def test_an_empty_input_is_called_empty(data):
    assert refusal(data).problem == "the input is empty"


@pytest.mark.parametrize(
    ("text", "where"),
    [
        (f'{{"resourceType": "Patient", "x": "{MARK}"', "line 1"),
        (f'{{"resourceType": "Patient",\n"x": {MARK}}}', "line 2"),
        (f"<Patient><name>{MARK}</name></Patient>", "line 1, column 1"),
        (f"{MARK}", "line 1, column 1"),
        (f'{{"resourceType": "Patient", "x": "{MARK}",}}', "line 1"),
        (f"{{'resourceType': '{MARK}'}}", "line 1, column 2"),
        (f'{{"resourceType": "Patient"}} {MARK}', "line 1, column 29"),
        ('{"resourceType": "Patient", "x": "\\ud800"}', "line 1"),
        ('{"resourceType": "Patient", "x": 1e999}', "line 1"),
    ],
)
def test_broken_json_is_refused_with_its_place_only(text, where):
    error = refusal(text.encode())
    assert error.problem.startswith("the input is not JSON")
    assert where in error.problem


@pytest.mark.parametrize("encoding", ["utf-16", "utf-16-le", "utf-16-be", "utf-32", "utf-32-le", "utf-32-be"])
def test_utf_16_and_utf_32_are_named_so_the_sender_can_save_the_file_again(encoding):
    for data in (text.encode(encoding) for text in ('{"resourceType": "Patient"}', "\ufeff" + '{"a": 1}')):
        assert refusal(data).problem == "the text is in UTF-16 or UTF-32"


def test_latin_1_is_not_utf_8():
    assert refusal(patient_with(f'"M{MARK}ller"').replace(MARK.encode(), b"\xfc")).problem == "the input is not UTF-8"


@pytest.mark.parametrize("word", ["NaN", "Infinity", "-Infinity", "[1, NaN]", "\n  NaN"])
def test_a_number_that_is_none_is_refused_by_name(word):
    assert "NaN or Infinity" in refusal(patient_with(word)).problem


def test_the_word_nan_in_a_text_is_a_text():
    assert read_json(patient_with('"NaN"'), LIMITS)["x"] == "NaN"
    assert "NaN" not in refusal(patient_with('"NaN",')).problem


@pytest.mark.parametrize(
    "data",
    [
        PATIENT + b"\n" + PATIENT,
        PATIENT + b"\r\n\r\n" + PATIENT + b"\r\n",
        zipped(PATIENT + b"\n" + PATIENT + b"\n" + b"{broken"),
    ],
    ids=["two lines", "with an empty line", "zipped, the third broken"],
)
def test_ndjson_is_recognised_and_sent_to_the_audit(data):
    error = refusal(data)
    assert "NDJSON" in error.problem
    assert "audit" in error.fix


def test_a_bundle_written_over_many_lines_is_no_ndjson():
    assert "NDJSON" not in refusal(b'{"resourceType": "Bundle",\n"entry": [\n{}\n{}\n]}').problem


@pytest.mark.parametrize("text", ["[]", f'[{{"resourceType": "{MARK}"}}]', f'"{MARK}"', "3", "null", "true"])
def test_a_list_or_a_value_at_the_top_is_no_resource(text):
    assert refusal(text.encode()).problem == "the JSON is not an object"


@pytest.mark.parametrize(
    "text", ["{}", '{"id": "p1"}', '{"resourceType": 3}', '{"resourceType": ""}', '{"resourceType": null}']
)
def test_an_object_without_resource_type_is_no_resource(text):
    assert "no resourceType" in refusal(text.encode()).problem


def test_of_a_key_given_twice_the_last_counts():
    assert read_json(b'{"resourceType": "Patient", "id": "a", "id": "b"}', LIMITS)["id"] == "b"


@pytest.mark.parametrize(
    ("data", "problem"),
    [
        (zipped(PATIENT)[:-1], "the gzip data ends too early"),
        (zipped(PATIENT)[:15], "the gzip data ends too early"),
        (b"\x1f\x8b", "the gzip data ends too early"),
        (zipped(PATIENT) + b"\x1f\x8b", "the gzip data ends too early"),
        (zipped(PATIENT)[:-8] + bytes(8), "the gzip data is damaged"),
        (zipped(PATIENT)[:12] + b"\xff\xff" + zipped(PATIENT)[14:], "the gzip data is damaged"),
        (b"\x1f\x8b" + b"not gzip at all", "the gzip data is damaged"),
        (zipped(PATIENT) + b"rubbish", "the gzip data is damaged"),
        (zipped(zipped(PATIENT)), "the input is compressed twice"),
    ],
    ids=[
        "a byte short",
        "half",
        "only its mark",
        "a second one begun",
        "wrong checksum",
        "changed inside",
        "no gzip",
        "rubbish behind",
        "twice",
    ],
)
def test_damaged_gzip_is_refused_as_such(data, problem):
    assert refusal(data).problem == problem


def test_a_gzip_bomb_stops_at_the_limit():
    bomb = zipped(bytes(50_000_000))
    assert len(bomb) < LIMITS.max_bytes
    assert isinstance(refusal(bomb), InputTooLargeError)


def test_a_bomb_in_many_members_stops_at_the_limit_too():
    member = zipped(b" " * 60_000)
    assert isinstance(refusal(member * 2), InputTooLargeError)
    assert "empty" in refusal(member).problem


def test_a_hundred_thousand_empty_members_cost_no_more_than_their_bytes():
    members = zipped(b"") * 100_000
    started = time.perf_counter()
    assert refusal(members, Limits(max_bytes=len(members), max_entries=1)).problem == "the input is empty"
    assert time.perf_counter() - started < 5  # the square of their number would take minutes


def test_the_limit_of_bytes_is_the_last_good_size():
    size = len(PATIENT)
    assert read_json(PATIENT, Limits(max_bytes=size, max_entries=1))["id"] == "p1"
    assert read_json(zipped(PATIENT), Limits(max_bytes=len(zipped(PATIENT)), max_entries=1))["id"] == "p1"
    assert isinstance(refusal(PATIENT, Limits(max_bytes=size - 1, max_entries=1)), InputTooLargeError)


def nested(levels: int, opening: str = "[", closing: str = "]") -> bytes:
    return patient_with(opening * levels + closing * levels)


def test_the_limit_of_depth_is_the_last_good_level():
    assert read_json(nested(199), LIMITS)["resourceType"] == "Patient"  # with the resource itself: 200
    assert "nested" in refusal(nested(200)).problem


@pytest.mark.parametrize(
    "data",
    [
        nested(30_000),
        b"[" * 90_000,
        b'{"a":' * 15_000,
        patient_with('{"a":[' * 5_000),
        patient_with('["' + "\\" * 1000 + '",' + "[" * 300),
        patient_with('["\\"",' + "[" * 300),
        patient_with('[""' + ",[" * 300),
    ],
    ids=[
        "closed",
        "never closed",
        "objects",
        "both",
        "after backslashes",
        "after an escaped quote",
        "after an empty text",
    ],
)
def test_a_nesting_bomb_is_refused_before_it_is_parsed(data):
    error = refusal(data)
    assert isinstance(error, InputTooLargeError)
    assert "nested" in error.problem


@pytest.mark.parametrize(
    "text",
    ['"' + "[" * 5000 + '"', '"\\"' + "{" * 5000 + '"', '"\\\\\\"' + "[" * 5000 + '"', json.dumps('"[' * 2000)],
)
def test_brackets_inside_a_text_are_no_levels(text):
    assert read_json(patient_with(text), LIMITS)["x"] == json.loads(text)


@pytest.mark.parametrize("data", [b"]" * 500 + b"[" * 500, b"}" * 90_000, b'"' * 1001, b"\\" * 1001, b'\\"[' * 300])
def test_brackets_in_disorder_are_refused_one_way_or_another(data):
    refusal(data)


JSON = st.recursive(
    st.none() | st.booleans() | st.integers(-5, 5) | st.text(alphabet='ab[]{}"\\/\n\u00e9:,', max_size=12),
    lambda inner: (
        st.lists(inner, max_size=4) | st.dictionaries(st.text(alphabet='ab[]{}"\\', max_size=6), inner, max_size=4)
    ),
    max_leaves=25,
)


def depth_by_parsing(value: object) -> int:
    if isinstance(value, dict):
        value = list(value.values())
    return 1 + max(map(depth_by_parsing, value), default=0) if isinstance(value, list) else 0


@given(value=JSON, indent=st.sampled_from([None, 1]), is_ascii=st.booleans())
def test_the_depth_told_without_parsing_is_the_depth_of_the_parsed_value(value, indent, is_ascii):
    text = json.dumps(value, indent=indent, ensure_ascii=is_ascii)
    assert depth_of(text.encode()) == depth_by_parsing(json.loads(text))


@given(data=st.binary(max_size=200) | st.text(alphabet='[]{}"\\:,0aNu \n', max_size=60).map(str.encode))
def test_no_bytes_whatever_crash_the_reader(data):
    try:
        assert isinstance(read_json(data, LIMITS), dict)
    except InputError as error:
        assert error.problem  # noqa: PT017 - either outcome is right; only another exception is wrong


@given(cuts=st.lists(st.integers(0, 3000), max_size=4), level=st.sampled_from([0, 1, 9]))
def test_gzip_members_may_be_cut_anywhere(cuts, level):
    text = b'{"resourceType": "Patient", "x": "' + b"abcdefghij" * 300 + b'"}'
    edges = [0, *sorted(cuts), len(text)]
    members = [zipped(text[a:b], level) for a, b in pairwise(edges)]
    assert read_json(b"".join(members), LIMITS) == json.loads(text)


def test_deflate_without_gzip_header_is_no_gzip():
    assert refusal(zlib.compress(PATIENT)).exit_code == 10
