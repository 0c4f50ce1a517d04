"""Whose data is whose: a Bundle sorted by patient. Two patients' data never mix."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from cds.errors import InputError, InputTooLargeError, Issue
from cds.fhir.bundle import PatientResources, SplitInput, split_by_patient
from cds.fhir.reading import COMMAND_LINE_LIMITS, Limits

LIMITS = Limits(max_bytes=1, max_entries=200)
SECRET = "Zyxw987"  # stands for what no issue may repeat
A, B = "http://a.example/fhir", "http://b.example/fhir"
URN_1, URN_2 = "urn:uuid:11111111-1111-4111-8111-111111111111", "urn:uuid:22222222-2222-4222-8222-222222222222"
MRN = "urn:example:mrn"


def patient(identity: str | None = "p1", **more: Any) -> dict[str, Any]:
    return {"resourceType": "Patient", **({} if identity is None else {"id": identity}), **more}


def result(identity: str, subject: str | dict[str, Any] | None, **more: Any) -> dict[str, Any]:
    about = {"reference": subject} if isinstance(subject, str) else subject
    return {"resourceType": "Observation", "id": identity, **({} if about is None else {"subject": about}), **more}


def of_type(kind: str, identity: str, **more: Any) -> dict[str, Any]:
    return {"resourceType": kind, "id": identity, **more}


def updated(on: str | None = None, version: str | None = None) -> dict[str, Any]:
    return {key: value for key, value in (("lastUpdated", on), ("versionId", version)) if value is not None}


def at(url: str, resource: dict[str, Any]) -> dict[str, Any]:
    return {"fullUrl": url, "resource": resource}


def bundle(*resources: Any, kind: str = "collection") -> dict[str, Any]:
    entries = [r if isinstance(r, dict) and "resourceType" not in r else {"resource": r} for r in resources]
    return {"resourceType": "Bundle", "type": kind, "entry": entries}


def split(*resources: Any, kind: str = "collection", limits: Limits = LIMITS) -> SplitInput:
    found = split_by_patient(bundle(*resources, kind=kind), limits)
    for issue in (*found.issues, *(issue for one in found.patients for issue in one.issues)):
        assert SECRET not in str(issue)
        assert issue.fix
    return found


def held(found: SplitInput) -> dict[str, list[str]]:
    """Every patient's resources but the Patient itself."""
    return {
        one.reference: [
            f"{kind}/{resource['id']}" for kind, rows in one.resources.items() if kind != "Patient" for resource in rows
        ]
        for one in found.patients
    }


def issues(found: SplitInput) -> list[tuple[str, str, str]]:
    return [_short(issue) for issue in found.issues]


def _short(issue: Issue) -> tuple[str, str, str]:
    return issue.resource, issue.path, issue.severity


def only(found: SplitInput) -> PatientResources:
    (one,) = found.patients
    return one


# --- whose resource is it ---------------------------------------------------------------------------------------------

SUBJECTS = [
    ("relative", {"reference": "Patient/p1"}),
    ("relative with version", {"reference": "Patient/p1/_history/2"}),
    ("absolute", {"reference": f"{A}/Patient/p1"}),
    ("absolute with version", {"reference": f"{A}/Patient/p1/_history/2"}),
    ("identifier", {"identifier": {"system": MRN, "value": "1"}}),
    ("identifier of a Patient", {"type": "Patient", "identifier": {"system": MRN, "value": "1"}}),
    ("conditional", {"reference": f"Patient?identifier={MRN}|1"}),
]


@pytest.mark.parametrize("subject", [subject for _, subject in SUBJECTS], ids=[name for name, _ in SUBJECTS])
def test_a_result_finds_its_patient_by_every_form_of_reference(subject):
    one = patient("p1", identifier=[{"system": MRN, "value": "1"}])
    other = patient("p2", identifier=[{"system": MRN, "value": "2"}])
    found = split(
        at(f"{A}/Patient/p1", one), at(f"{A}/Patient/p2", other), at(f"{A}/Observation/o1", result("o1", subject))
    )
    assert held(found) == {"Patient/p1": ["Observation/o1"], "Patient/p2": []}
    assert found.issues == ()


@pytest.mark.parametrize("identity", [None, "p1"])
def test_a_result_finds_its_patient_by_urn(identity):
    found = split(at(URN_1, patient(identity)), at(URN_2, patient("other")), result("o1", URN_1))
    mine = f"Patient/{identity or URN_1.removeprefix('urn:uuid:')}"
    assert held(found) == {"Patient/other": [], mine: ["Observation/o1"]}


def test_a_urn_refers_to_the_entry_even_where_another_patient_bears_it_as_id():
    plain = URN_1.removeprefix("urn:uuid:")
    found = split(at(URN_1, patient("p1")), patient(plain), result("o1", URN_1), result("o2", f"Patient/{plain}"))
    assert held(found) == {"Patient/p1": ["Observation/o1"], f"Patient/{plain}": ["Observation/o2"]}


def test_an_address_on_another_server_is_not_the_patient_of_that_id_here():
    found = split(at(f"{A}/Patient/p1", patient()), result("o1", f"{B}/Patient/p1"))
    assert held(found) == {"Patient/p1": []}
    assert issues(found) == [("Observation/o1", "subject", "refused")]


def test_a_relative_reference_means_the_server_its_own_resource_comes_from():
    found = split(at(f"{A}/Patient/p1", patient()), at(f"{B}/Observation/o1", result("o1", "Patient/p1")))
    assert held(found) == {"Patient/p1": []}
    assert issues(found) == [("Observation/o1", "subject", "refused")]


def test_a_full_url_that_names_another_id_than_its_resource_is_not_followed():
    found = split(
        at(f"{A}/Patient/p1", patient("p2")), patient("p1"), at(f"{A}/Observation/o1", result("o1", "Patient/p1"))
    )
    assert held(found) == {"Patient/p1": ["Observation/o1"], "Patient/p2": []}
    assert issues(found) == [("Patient/p2", "fullUrl", "doubtful")]


def test_one_full_url_for_two_patients_names_neither():
    found = split(at(URN_1, patient("p1")), at(URN_1, patient("p2")), result("o1", URN_1))
    assert held(found) == {"Patient/p1": [], "Patient/p2": []}
    assert issues(found) == [("Observation/o1", "subject", "refused")]


def test_an_identifier_that_two_patients_share_names_neither():
    shared = [{"system": MRN, "value": SECRET}]
    by_identifier = result("o1", {"identifier": shared[0]})
    found = split(patient("p1", identifier=shared), patient("p2", identifier=shared), by_identifier)
    assert held(found) == {"Patient/p1": [], "Patient/p2": []}
    (issue,) = found.issues
    assert "fits several Patients" in issue.problem


def test_an_identifier_or_address_shared_with_a_refused_patient_does_not_pass_to_the_other():
    shared = [{"system": MRN, "value": "1"}]
    found = split(
        at(URN_1, patient("p1", gender="male", identifier=shared)),
        patient("p1", gender="female"),
        at(URN_1, patient("p2", identifier=shared)),
        result("o1", {"identifier": shared[0]}),
        result("o2", URN_1),
    )
    assert held(found) == {"Patient/p2": []}
    assert ("Patient/p1", "id", "refused") in issues(found)


def test_an_identifier_of_a_refused_patient_alone_names_no_one():
    mine = [{"system": MRN, "value": "1"}]
    found = split(
        patient("p1", gender="male", identifier=mine),
        patient("p1", gender="female"),
        patient("p2"),
        result("o1", {"identifier": mine[0]}),
    )
    assert held(found) == {"Patient/p2": []}


@pytest.mark.parametrize(
    ("subject", "problem"),
    [
        (None, "is missing"),
        ({}, "is not a reference that can be followed"),
        ({"display": SECRET}, "is not a reference that can be followed"),
        ("#p", "names a Patient that is not in the input"),
        ({"reference": f"Patient/{SECRET}"}, "names a Patient that is not in the input"),
        ({"identifier": {"system": MRN, "value": SECRET}}, "names a Patient that is not in the input"),
        (f"Group/{SECRET}", "does not name a Patient"),
        ({"type": "Group", "identifier": {"system": MRN, "value": SECRET}}, "does not name a Patient"),
        ({"reference": ["Patient/p1"]}, "is not a reference that can be followed"),
    ],
)
def test_a_result_of_no_one_we_know_is_refused_even_with_one_patient_only(subject, problem):
    found = split(patient(), result("o1", subject))
    assert held(found) == {"Patient/p1": []}
    (issue,) = found.issues
    assert (issue.resource, issue.path, issue.problem, issue.severity) == (
        "Observation/o1",
        "subject",
        problem,
        "refused",
    )


def test_an_allergy_names_its_patient_in_an_element_of_its_own():
    mine = of_type("AllergyIntolerance", "a1", patient={"reference": "Patient/p1"})
    wrong = of_type("AllergyIntolerance", "a2", subject={"reference": "Patient/p1"})
    found = split(patient(), mine, wrong)
    assert held(found) == {"Patient/p1": ["AllergyIntolerance/a1"]}
    assert issues(found) == [("AllergyIntolerance/a2", "patient", "refused")]


def test_a_device_of_no_one_is_a_thing_of_the_ward_not_an_error():
    assert issues(split(patient(), of_type("Device", "d1"))) == [("Device/d1", "patient", "information")]


def test_several_patients_each_get_their_own_and_are_sorted():
    found = split(
        result("o2", "Patient/p2"), patient("p2"), result("o1", "Patient/p1"), patient("p1"), result("o0", "Patient/p1")
    )
    assert held(found) == {"Patient/p1": ["Observation/o0", "Observation/o1"], "Patient/p2": ["Observation/o2"]}
    assert [one.reference for one in found.patients] == ["Patient/p1", "Patient/p2"]
    assert [one.read for one in found.patients] == [3, 2]


def test_a_reference_is_resolved_only_to_what_is_ones_own_or_no_ones():
    medication = of_type("Medication", "m1")
    order = of_type(
        "MedicationRequest",
        "r1",
        subject={"reference": "Patient/p1"},
        medicationReference={"reference": "Medication/m1"},
    )
    stay = of_type("Encounter", "e2", subject={"reference": "Patient/p2"})
    found = split(patient("p1"), patient("p2"), medication, order, stay)
    one, two = found.patients
    assert [resource["id"] for resource in one.resources["Medication"]] == ["m1"]
    assert "Medication" not in two.resources
    assert one.resolve({"reference": "Medication/m1"}, order) == medication
    assert one.resolve({"reference": "Encounter/e2"}, order) is None
    assert two.resolve({"reference": "Encounter/e2"}, stay) == stay
    assert one.resolve({"reference": "Patient/p2"}, order) is None


def test_a_contained_resource_is_found_in_its_holder_only():
    inside = of_type("Medication", "med")
    holder = of_type("MedicationRequest", "r1", subject={"reference": "Patient/p1"}, contained=[inside])
    other = of_type("MedicationRequest", "r2", subject={"reference": "Patient/p1"})
    one = only(split(patient(), holder, other))
    assert one.resolve({"reference": "#med"}, holder) == inside
    assert one.resolve({"reference": "#med"}, other) is None
    assert "Medication" not in one.resources


def test_resources_that_refer_to_each_other_in_a_ring_are_simply_read():
    mine = {"reference": "Patient/p1"}
    ring = (
        of_type("Encounter", "e1", subject=mine, partOf={"reference": "Encounter/e2"}),
        of_type("Encounter", "e2", subject=mine, partOf={"reference": "Encounter/e1"}),
        of_type("Medication", "m1", ingredient=[{"itemReference": {"reference": "Medication/m1"}}]),
        of_type("MedicationRequest", "r1", subject=mine, medicationReference={"reference": "Medication/m1"}),
        patient("p1", link=[{"other": {"reference": "Patient/p1"}, "type": "seealso"}]),
        result("o1", "Observation/o1"),
    )
    found = split(*ring)
    assert held(found) == {"Patient/p1": ["Encounter/e1", "Encounter/e2", "Medication/m1", "MedicationRequest/r1"]}
    assert issues(found) == [("Observation/o1", "subject", "refused")]


def test_a_patient_replaced_by_another_is_said_and_nothing_is_merged():
    old = patient("p1", link=[{"other": {"reference": "Patient/p2"}, "type": "replaced-by"}])
    found = split(old, patient("p2"), result("o1", "Patient/p1"))
    assert held(found) == {"Patient/p1": ["Observation/o1"], "Patient/p2": []}
    assert [_short(issue) for issue in found.patients[0].issues] == [("Patient/p1", "link[0].type", "information")]


# --- repeated resources -----------------------------------------------------------------------------------------------


def test_the_same_result_sent_twice_counts_once_and_silently():
    found = split(
        patient(), result("o1", "Patient/p1", x=1), result("o1", "Patient/p1", x=1, meta=updated(version="7"))
    )
    assert held(found) == {"Patient/p1": ["Observation/o1"]}
    assert found.issues == only(found).issues == ()


NEWEST = [
    (updated("2025-01-01T08:00:00Z"), updated("2025-01-01T09:00:00Z")),
    (updated("2025-01-01T09:30:00+02:00"), updated("2025-01-01T08:00:00Z")),  # 07:30 and 08:00 in UTC
    (updated(version="9"), updated(version="10")),
    (updated("2025-01-01T08:00:00Z", "2"), updated("2025-01-01T09:00:00Z", "1")),
    (None, updated("2025-01-01T08:00:00Z")),
    (updated(version="3"), updated("2025-01-01T08:00:00Z")),
]


@pytest.mark.parametrize("is_reversed", [False, True])
@pytest.mark.parametrize(("older", "newer"), NEWEST)
def test_of_two_versions_the_newest_counts_whatever_their_order(older, newer, is_reversed):
    versions = [result("o1", "Patient/p1", x="old", meta=older), result("o1", "Patient/p1", x="new", meta=newer)]
    one = only(split(patient(), *(reversed(versions) if is_reversed else versions)))
    assert [resource["x"] for resource in one.resources["Observation"]] == ["new"]
    assert [_short(issue) for issue in one.issues] == [("Observation/o1", "id", "doubtful")]


@pytest.mark.parametrize(
    ("one_meta", "other_meta"),
    [
        (None, None),
        (updated("2025-01-01T08:00:00Z"), updated("2025-01-01T08:00:00Z")),
        (updated("2025-01-01T08:00:00Z"), updated("2025-01-01T09:00:00+01:00")),
        (updated(version="3"), updated(version="3")),
        (updated("yesterday"), updated("2025-01-01")),
        (SECRET, None),
    ],
)
def test_versions_that_nothing_orders_are_all_refused(one_meta, other_meta):
    found = split(
        patient(), result("o1", "Patient/p1", x=SECRET, meta=one_meta), result("o1", "Patient/p1", x=2, meta=other_meta)
    )
    assert held(found) == {"Patient/p1": []}
    assert issues(found) == [("Observation/o1", "meta.lastUpdated", "refused")]


def test_the_newest_version_decides_whose_result_it_is():
    found = split(
        patient("p1"),
        patient("p2"),
        result("o1", "Patient/p1", meta=updated(version="1")),
        result("o1", "Patient/p2", meta=updated(version="2")),
    )
    assert held(found) == {"Patient/p1": [], "Patient/p2": ["Observation/o1"]}


def test_two_different_patients_with_one_id_are_refused_with_everything_about_them():
    # ruling 43; not even a newer version helps, because nobody knows which results belong to which
    found = split(
        patient("p1", gender="male", meta=updated("2025-01-01T08:00:00Z")),
        patient("p1", gender="female", meta=updated("2025-02-01T08:00:00Z")),
        result("o1", "Patient/p1"),
        patient("p2"),
        result("o2", "Patient/p2"),
    )
    assert held(found) == {"Patient/p2": ["Observation/o2"]}
    assert issues(found) == [("Patient/p1", "id", "refused")]


def test_the_same_patient_sent_twice_is_one_patient():
    found = split(patient("p1", gender="male"), patient("p1", gender="male", meta=updated(version="2")))
    assert held(found) == {"Patient/p1": []}


def test_one_id_on_two_servers_with_different_content_is_refused():
    found = split(
        at(f"{A}/Patient/p1", patient()), at(f"{B}/Patient/p1", patient(gender="male")), result("o1", "Patient/p1")
    )
    assert found.patients == ()


# --- Bundles ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["searchset", "collection", "transaction", "batch", "document", "message"])
def test_a_bundle_of_any_type_is_read(kind):
    asked = {"request": {"method": "POST", "url": "Observation"}}
    found = split({**at(URN_1, patient()), **asked}, {"resource": result("o1", URN_1), **asked}, kind=kind)
    assert held(found) == {"Patient/p1": ["Observation/o1"]}


def test_a_single_resource_is_a_bundle_of_one():
    assert held(split_by_patient(patient(), LIMITS)) == {"Patient/p1": []}
    alone = split_by_patient(result("o1", "Patient/p1"), LIMITS)
    assert alone.patients == ()
    assert issues(alone) == [("input", "resourceType", "refused")]


def test_bundles_inside_a_bundle_are_opened_and_counted():
    inner = bundle(result("o1", "Patient/p1"), bundle(result("o2", "Patient/p1")))
    assert held(split(inner, patient())) == {"Patient/p1": ["Observation/o1", "Observation/o2"]}
    with pytest.raises(InputTooLargeError):
        split(bundle(*(result(f"o{n}", "Patient/p1") for n in range(100))), *(patient() for _ in range(100)))


def test_too_many_bundles_in_one_another_cost_the_innermost_only():
    inner = bundle(result("deep", "Patient/p1"))
    for _ in range(5):
        inner = bundle(inner)
    found = split_by_patient({**inner, "entry": [*inner["entry"], {"resource": patient()}]}, LIMITS)
    assert held(found) == {"Patient/p1": []}
    (issue,) = found.issues
    assert issue.problem == "lies in too many Bundles"


def test_a_history_gives_the_newest_version_without_reproach():
    found = split(
        patient("p1", gender="male", meta=updated(version="2")),
        patient("p1", gender="unknown", meta=updated(version="1")),
        result("o1", "Patient/p1", x=1, meta=updated(version="1")),
        result("o1", "Patient/p1", x=2, meta=updated(version="2")),
        kind="history",
    )
    one = only(found)
    assert one.patient["gender"] == "male"
    assert [resource["x"] for resource in one.resources["Observation"]] == [2]
    assert found.issues == one.issues == ()


def deletion(url: str, when: str | None = None) -> dict[str, Any]:
    response = {} if when is None else {"response": {"status": "204", "lastModified": when}}
    return {"request": {"method": "DELETE", "url": url}, **response}


@pytest.mark.parametrize(
    ("when", "kept"),
    [
        ("2025-02-01T00:00:00Z", []),
        ("2025-01-01T00:00:00Z", ["Observation/o1"]),
        (None, []),
        ("2025-01-15T00:00:00Z", []),
    ],
    ids=["deleted later", "created again later", "at an unknown time", "at the same time"],
)
def test_a_deleted_result_stays_deleted_unless_it_came_back(when, kept):
    mine = result("o1", "Patient/p1", meta=updated("2025-01-15T00:00:00Z"))
    for url in ("Observation/o1", f"{A}/Observation/o1"):
        assert held(split(patient(), deletion(url, when), mine, kind="history")) == {"Patient/p1": kept}


def test_a_transaction_that_asks_for_a_deletion_deletes_nothing_here():
    found = split(patient(), deletion("Observation/o1"), result("o1", "Patient/p1"), kind="transaction")
    assert held(found) == {"Patient/p1": ["Observation/o1"]}


def test_results_of_a_deleted_patient_belong_to_no_one():
    found = split(patient(), deletion("Patient/p1"), patient("p2"), result("o1", "Patient/p1"), kind="history")
    assert held(found) == {"Patient/p2": []}
    assert issues(found) == [("Observation/o1", "subject", "refused")]


@pytest.mark.parametrize(
    ("entry", "place"),
    [
        ({"resource": "text"}, ("Bundle/entry-2", "resource", "refused")),
        ({"resource": ["list"]}, ("Bundle/entry-2", "resource", "refused")),
        ({"resource": {}}, ("Bundle/entry-2", "resource.resourceType", "refused")),
        ({"resource": {"resourceType": "not a type"}}, ("Bundle/entry-2", "resource.resourceType", "refused")),
        ({"resource": {"resourceType": "Observation", "id": f"{SECRET}/x"}}, ("Observation/entry-2", "id", "refused")),
        ({"resource": {"resourceType": "Observation", "id": 7}}, ("Observation/entry-2", "id", "refused")),
    ],
)
def test_an_entry_that_is_no_resource_costs_that_entry(entry, place):
    found = split_by_patient({"resourceType": "Bundle", "entry": [{"resource": patient()}, entry]}, LIMITS)
    assert held(found) == {"Patient/p1": []}
    assert issues(found) == [place]


@pytest.mark.parametrize("entry", ["text", 3, ["x"], True])
def test_an_entry_that_is_no_object_costs_that_entry(entry):
    found = split_by_patient({"resourceType": "Bundle", "entry": [entry, {"resource": patient()}]}, LIMITS)
    assert held(found) == {"Patient/p1": []}
    assert issues(found) == [("Bundle/entry-1", "resource", "refused")]


@pytest.mark.parametrize("entries", [None, [], {}, "text", [None], [{}], [{"search": {"mode": "outcome"}}]])
def test_a_bundle_without_patient_gives_an_issue_and_no_patients(entries):
    found = split_by_patient({"resourceType": "Bundle", "entry": entries}, LIMITS)
    assert found.patients == ()
    assert ("Bundle", "entry", "refused") in issues(found)


def test_parameters_are_refused_with_the_way_out():
    with pytest.raises(InputError, match="Send the Bundle that is inside it"):
        split_by_patient({"resourceType": "Parameters"}, LIMITS)


def test_what_nobody_uses_is_counted_and_never_an_issue():
    found = split(
        patient("p1"),
        patient("p2"),
        of_type("Claim", "c1", patient={"reference": "Patient/p1"}),
        of_type("Coverage", "c2", beneficiary={"reference": "Patient/p2"}),
        of_type("Organization", "o1"),
    )
    assert [one.not_needed for one in found.patients] == [1, 1]
    assert found.not_needed == 1
    assert found.issues == ()


def test_the_limit_of_entries_is_the_last_good_number():
    three = (patient(), result("o1", "Patient/p1"), result("o2", "Patient/p1"))
    assert held(split(*three, limits=Limits(max_bytes=1, max_entries=3)))
    with pytest.raises(InputTooLargeError):
        split(*three, limits=Limits(max_bytes=1, max_entries=2))


def test_an_input_of_200_001_entries_is_too_large_for_the_command_line():
    mine = {"resource": result("o1", "Patient/p1")}
    document = {"resourceType": "Bundle", "entry": [{"resource": patient()}] + [mine] * 200_000}
    with pytest.raises(InputTooLargeError, match="200000 entries"):
        split_by_patient(document, COMMAND_LINE_LIMITS)
    document["entry"].pop()
    assert only(split_by_patient(document, COMMAND_LINE_LIMITS)).read == 2


# --- for every input --------------------------------------------------------------------------------------------------

_METAS = [None, updated(version="1"), updated(version="2"), updated("2025-01-01T08:00:00Z")]


@st.composite
def entries(draw: st.DrawFn) -> list[Any]:
    """Patients p0 to p2 in all the trouble above, and results that name one of them or no one."""
    found: list[Any] = []
    for number in range(3):
        for _ in range(draw(st.integers(0, 2))):
            one = patient(
                f"p{number}",
                gender=draw(st.sampled_from(["male", "female"])),
                identifier=[{"system": MRN, "value": draw(st.sampled_from("01"))}],
                meta=draw(st.sampled_from(_METAS)),
            )
            url = draw(st.sampled_from([None, f"{A}/Patient/p{number}", f"{B}/Patient/p{number}", URN_1, URN_2]))
            found.append({"resource": one} if url is None else at(url, one))
    subjects = st.sampled_from(
        [*(f"Patient/p{n}" for n in range(3)), f"{A}/Patient/p0", f"{B}/Patient/p1", URN_1, URN_2]
    ) | st.sampled_from([None, {"identifier": {"system": MRN, "value": "1"}}])
    for _ in range(draw(st.integers(0, 6))):
        one = result(
            f"o{draw(st.integers(0, 3))}", draw(subjects), x=draw(st.integers(0, 1)), meta=draw(st.sampled_from(_METAS))
        )
        url = draw(st.sampled_from([None, f"{A}/Observation/{one['id']}", f"{B}/Observation/{one['id']}"]))
        found.append({"resource": one} if url is None else at(url, one))
    return found


def everything(found: SplitInput) -> tuple[Any, ...]:
    patients = [(p.reference, p.patient, dict(p.resources), p.read, p.not_needed, p.issues) for p in found.patients]
    return patients, found.issues, found.not_needed


@given(entries=entries(), kind=st.sampled_from(["collection", "history"]), data=st.data())
def test_the_order_of_the_entries_never_matters(entries, kind, data):
    shuffled = data.draw(st.permutations(entries))
    assert everything(split(*shuffled, kind=kind)) == everything(split(*entries, kind=kind))


@given(entries=entries(), kind=st.sampled_from(["collection", "history"]))
def test_no_result_belongs_to_two_patients_and_a_named_one_to_no_other(entries, kind):
    found = split(*entries, kind=kind)
    named = list(_results(found.patients))
    assert len({identity for identity, _, _ in named}) == len(named)
    for _, owner, subject in named:
        text = subject.get("reference", "")
        if "Patient/" in text:
            assert text.endswith(owner)


def _results(patients: Iterable[PatientResources]) -> Iterable[tuple[str, str, dict[str, Any]]]:
    for one in patients:
        for resource in one.resources.get("Observation", ()):
            yield resource["id"], one.reference, resource["subject"]


JUNK = st.recursive(
    st.none() | st.booleans() | st.integers() | st.text(max_size=5),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(
            st.sampled_from(
                [
                    "resource",
                    "resourceType",
                    "id",
                    "fullUrl",
                    "subject",
                    "reference",
                    "entry",
                    "type",
                    "meta",
                    "link",
                    "identifier",
                    "request",
                    "method",
                    "url",
                ]
            ),
            inner,
            max_size=5,
        )
    ),
    max_leaves=20,
)


@given(junk=st.lists(JUNK, max_size=4), kind=st.sampled_from(["history", "collection"]))
def test_no_junk_in_the_entries_harms_a_patient_beside_it(junk, kind):
    document = {"resourceType": "Bundle", "type": kind, "entry": [*junk, {"resource": patient("good")}]}
    assert "Patient/good" in [one.reference for one in split_by_patient(document, LIMITS).patients]


def test_the_input_is_never_changed():
    document = bundle(at(URN_1, patient(None)), result("o1", URN_1))
    before = repr(document)
    split_by_patient(document, LIMITS)
    assert repr(document) == before
