"""Who is let in: the tokens an attacker would try, the scopes of one who may come in, and keys that change.

The attacks follow RFC 8725 (best current practice for JWT), the answers RFC 6750, sections 3 and 3.1.
"""

from __future__ import annotations

import base64
import hashlib
import hmac
import json
import os
import threading
from datetime import UTC, datetime, timedelta
from functools import cache

import jwt
import pytest
from cryptography.hazmat.primitives.asymmetric import ec, rsa
from cryptography.hazmat.primitives.serialization import Encoding, PublicFormat
from in_process import DOCUMENT, Client, parts
from jwt.algorithms import ECAlgorithm, RSAAlgorithm
from werkzeug import Response

from cds.service import jwks
from cds.service.auth import SCOPES, Gatekeeper, ScopeError, TokenError
from cds.service.jwks import KeysUnavailableError, fetch_key_set, usable_keys
from cds.service.settings import SettingsError, TokenSettings

NOON = datetime(2026, 3, 1, 12, 0, tzinfo=UTC)
SECOND, MINUTE, HOUR = timedelta(seconds=1), timedelta(minutes=1), timedelta(hours=1)
ISSUER, AUDIENCE, ADDRESS = "https://id.example", "gdmt-cards", "https://id.example/keys"
CLAIMS = {
    "iss": ISSUER,
    "aud": AUDIENCE,
    "sub": "ehr-north",
    "iat": int(NOON.timestamp()) - 60,
    "exp": int(NOON.timestamp()) + 600,
    "scope": "openid assess check-order",
}


@cache
def rsa_key(name="first", bits=2048):
    return rsa.generate_private_key(public_exponent=65537, key_size=bits)


@cache
def curve_key(name="first", curve=ec.SECP384R1):
    return ec.generate_private_key(curve())


def public(key, kid, **more):
    algorithm = RSAAlgorithm if isinstance(key, rsa.RSAPrivateKey) else ECAlgorithm
    member = {**algorithm.to_jwk(key.public_key(), as_dict=True), "kid": kid, "use": "sig", **more}
    member.pop("key_ops", None)
    return {name: value for name, value in member.items() if value is not None}


def key_set(*members):
    return json.dumps({"keys": list(members)}).encode()


def part(value):
    return base64.urlsafe_b64encode(json.dumps(value).encode() if not isinstance(value, bytes) else value).rstrip(b"=")


def token(claims=CLAIMS, key=None, signed_as=None, **header):
    """A token signed with the first RSA key unless told otherwise; a header of None is left out."""
    header = {"alg": "RS256", "kid": "first", "typ": "JWT", **header}
    text = part({name: value for name, value in header.items() if value is not None}) + b"." + part(claims)
    signer = jwt.get_algorithm_by_name(signed_as or "RS256")
    return (text + b"." + part(signer.sign(text, key or rsa_key()))).decode()


def without(*names, **more):
    return {name: value for name, value in {**CLAIMS, **more}.items() if name not in names}


class Clock:
    def __init__(self):
        self.moment = NOON

    def __call__(self):
        return self.moment


@pytest.fixture
def clock():
    return Clock()


@pytest.fixture
def key_file(tmp_path):
    path = tmp_path / "keys.json"
    path.write_bytes(key_set(public(rsa_key(), "first"), public(curve_key(), "curve")))
    return path


@pytest.fixture
def reasons():
    return []


@pytest.fixture
def gate(key_file, clock, reasons):
    tokens = TokenSettings(issuer=ISSUER, audience=AUDIENCE, jwks=key_file)
    return Gatekeeper(tokens, now=clock, fetch_keys=must_not_fetch, tell=reasons.append)


def must_not_fetch(url):
    raise AssertionError(f"nothing may be fetched, and {url} was")


def bearer(text):
    return f"Bearer {text}"


def is_let_in(gate, text):
    try:
        gate.caller(bearer(text))
    except TokenError:
        return False
    return True


# A good token


def test_a_good_token_lets_its_caller_do_what_its_scopes_say(gate):
    caller = gate.caller(bearer(token()))
    assert caller.scopes == {"assess", "check-order"}
    assert gate.admit(bearer(token()), "assess") == caller.subject_key


def test_a_good_token_on_the_curve_is_taken_too(gate):
    assert is_let_in(gate, token(key=curve_key(), signed_as="ES384", alg="ES384", kid="curve"))


def test_the_scheme_is_read_in_any_case(gate):
    assert gate.caller(f"bearer  {token()} ").scopes


def test_the_key_of_a_caller_stays_the_same_names_nobody_and_differs_by_issuer_kind_and_name(key_file, clock, gate):
    def key(claims):
        return gate.caller(bearer(token(claims))).subject_key

    first = key(CLAIMS)
    assert key(without(exp=CLAIMS["exp"] + 1, scope="reply")) == first
    assert "ehr-north" not in first
    others = {key(without(sub="ehr-south")), key(without("sub", client_id="ehr-north"))}
    elsewhere = TokenSettings(issuer="https://other.example", audience=AUDIENCE, jwks=key_file)
    other_gate = Gatekeeper(elsewhere, now=clock, fetch_keys=must_not_fetch)
    others.add(other_gate.caller(bearer(token(without(iss="https://other.example")))).subject_key)
    assert len({first, *others}) == 4


SCOPE_SHAPES = [
    ({"scope": "reply  cards"}, {"reply", "cards"}),
    ({"scope": ""}, set()),
    ({"scope": "Assess assess:read reassess * gdmt-cards/assess"}, set()),
    ({"scope": ["assess"]}, set()),
    ({"scope": None, "scp": ["metrics", "rules", 7, None]}, {"metrics", "rules"}),
    ({"scope": "rules", "scp": ["metrics"]}, {"rules"}),
    ({"scope": None, "scp": "assess"}, set()),
    ({"scope": None, "scp": {"assess": True}}, set()),
]


@pytest.mark.parametrize(("claims", "scopes"), SCOPE_SHAPES)
def test_scopes_are_whole_words_of_ours(gate, claims, scopes):
    assert gate.caller(bearer(token(without(**claims)))).scopes == scopes


@pytest.mark.parametrize("scope", SCOPES)
def test_without_its_scope_an_endpoint_is_closed_and_says_which_it_is(gate, reasons, scope):
    rest = " ".join(set(SCOPES) - {scope})
    with pytest.raises(ScopeError) as caught:
        gate.admit(bearer(token(without(scope=rest))), scope)
    assert caught.value.http_status == 403
    assert caught.value.headers == {"WWW-Authenticate": f'Bearer error="insufficient_scope", scope="{scope}"'}
    assert reasons == ["scope-missing"]
    assert gate.admit(bearer(token(without(scope=scope))), scope)


def test_without_token_settings_everyone_may_do_everything(clock):
    gate = Gatekeeper(None, now=clock, fetch_keys=must_not_fetch)
    assert len({gate.admit(None, scope) for scope in SCOPES}) == 1
    assert gate.admit("Bearer nonsense", "reply")


# No token, and tokens that are not taken


@pytest.mark.parametrize(
    "header", [None, "", " ", "Bearer", "Bearer ", "Basic ZWhyOnNlY3JldA==", "Token abc", "bearerabc"]
)
def test_without_a_token_the_answer_asks_for_one_and_names_no_error(gate, header):
    with pytest.raises(TokenError) as caught:
        gate.admit(header, "assess")
    assert caught.value.http_status == 401
    assert caught.value.error is None
    assert caught.value.headers == {"WWW-Authenticate": "Bearer"}


def unsigned(algorithm, signature=b""):
    return b".".join((part({"alg": algorithm, "kid": "first"}), part(CLAIMS), part(signature))).decode()


def signed_with_the_public_key(secret, algorithm="HS256", kid="first"):
    text = part({"alg": algorithm, "kid": kid}) + b"." + part(CLAIMS)
    return (text + b"." + part(hmac.new(secret, text, hashlib.sha256).digest())).decode()


def pem(format_=PublicFormat.SubjectPublicKeyInfo, encoding=Encoding.PEM):
    return rsa_key().public_key().public_bytes(encoding, format_)


def tampered():
    head, _, signature = token().split(".")
    return b".".join((head.encode(), part(without(scope=" ".join(SCOPES))), signature.encode())).decode()


def number_too_long():
    claims = json.dumps(CLAIMS).replace(f'"exp": {CLAIMS["exp"]}', '"exp": ' + "9" * 5000)
    return token(claims.encode())


def no_number(text):
    return token(json.dumps(CLAIMS).replace(f'"exp": {CLAIMS["exp"]}', f'"exp": {text}').encode())


AT = int(NOON.timestamp())
OWN_KEY = {"jwk": public(rsa_key("attacker"), "first")}
# Built when the test runs: making keys takes time.
ATTACKS = {
    "wrong audience": ("token-audience", lambda: token(without(aud="another-service"))),
    "audience that only begins like ours": ("token-audience", lambda: token(without(aud="gdmt-cards.example"))),
    "no audience": ("token-claims", lambda: token(without("aud"))),
    "audience of numbers": ("token-audience", lambda: token(without(aud=[1]))),
    "wrong issuer": ("token-issuer", lambda: token(without(iss="https://id.example.evil"))),
    "issuer with a slash more": ("token-issuer", lambda: token(without(iss=f"{ISSUER}/"))),
    "no issuer": ("token-claims", lambda: token(without("iss"))),
    "list of issuers": ("token-issuer", lambda: token(without(iss=[ISSUER]))),
    "expired": ("token-expired", lambda: token(without(exp=AT - 30))),
    "not yet valid": ("token-not-yet-valid", lambda: token(without(nbf=AT + 31))),
    "issued in the future": ("token-not-yet-valid", lambda: token(without(iat=AT + 31))),
    "no exp": ("token-claims", lambda: token(without("exp"))),
    "no iat": ("token-claims", lambda: token(without("iat"))),
    "exp as text": ("token-claims", lambda: token(without(exp=str(AT + 600)))),
    "exp true": ("token-claims", lambda: token(without(exp=True))),
    "exp null": ("token-claims", lambda: token(without(exp=None))),
    "nbf null": ("token-claims", lambda: token(without(nbf=None))),
    "exp without end": ("token-claims", lambda: no_number("Infinity")),
    "exp too large": ("token-claims", lambda: no_number("1e999")),
    "exp not a number": ("token-claims", lambda: no_number("NaN")),
    "exp of 5000 digits": ("token-malformed", number_too_long),
    "nobody's": ("token-claims", lambda: token(without("sub"))),
    "subject without a name": ("token-claims", lambda: token(without(sub=""))),
    "subject a list": ("token-malformed", lambda: token(without(sub=["ehr-north"]))),
    "alg none": ("token-malformed", lambda: unsigned("none")),
    "alg none with a signature": ("token-algorithm", lambda: unsigned("none", b"x")),
    "alg None": ("token-algorithm", lambda: unsigned("None", b"x")),
    "alg nOnE": ("token-algorithm", lambda: unsigned("nOnE", b"x")),
    "no alg": ("token-algorithm", lambda: token(alg=None)),
    "alg a list": ("token-algorithm", lambda: token(alg=["RS256"])),
    "HS256 with the public key": ("token-algorithm", lambda: signed_with_the_public_key(pem())),
    "HS256 with the public key, stripped": ("token-algorithm", lambda: signed_with_the_public_key(pem().strip())),
    "HS256 with the public key, PKCS 1": (
        "token-algorithm",
        lambda: signed_with_the_public_key(pem(PublicFormat.PKCS1)),
    ),
    "HS256 with the public key, DER": (
        "token-algorithm",
        lambda: signed_with_the_public_key(pem(encoding=Encoding.DER)),
    ),
    "HS256 with the key set": (
        "token-algorithm",
        lambda: signed_with_the_public_key(key_set(public(rsa_key(), "first"))),
    ),
    "HS256 said to be RS256": ("token-signature", lambda: signed_with_the_public_key(pem(), "RS256")),
    "HS256 without a secret": ("token-algorithm", lambda: signed_with_the_public_key(b"")),
    "PS256 with the right key": ("token-algorithm", lambda: token(alg="PS256", signed_as="PS256")),
    "RS512 with the right key": ("token-algorithm", lambda: token(alg="RS512", signed_as="RS512")),
    "RSA key used as a curve": ("token-kid", lambda: token(alg="ES384")),
    "curve key used as RSA": ("token-kid", lambda: token(kid="curve")),
    "ES384 with an empty signature of zeros": (
        "token-signature",
        lambda: b".".join((part({"alg": "ES384", "kid": "curve"}), part(CLAIMS), part(bytes(96)))).decode(),
    ),
    "key of another": ("token-signature", lambda: token(key=rsa_key("attacker"))),
    "key of another, brought along": ("token-signature", lambda: token(key=rsa_key("attacker"), **OWN_KEY)),
    "key of another, at an address": (
        "token-signature",
        lambda: token(key=rsa_key("attacker"), jku="https://evil.example/keys", x5u="https://evil.example/x"),
    ),
    "key of another, its address as kid": (
        "token-kid",
        lambda: token(key=rsa_key("attacker"), kid="https://evil.example"),
    ),
    "claims changed": ("token-signature", tampered),
    "no kid": ("token-kid", lambda: token(kid=None)),
    "empty kid": ("token-kid", lambda: token(kid="")),
    "kid a number": ("token-malformed", lambda: token(kid=1)),
    "kid a list": ("token-malformed", lambda: token(kid=["first"])),
    "kid of a file": ("token-kid", lambda: token(kid="../../../../dev/null")),
    "kid of the key file": ("token-kid", lambda: token(kid="./keys.json")),
    "kid with a zero byte": ("token-kid", lambda: token(kid="first\0")),
    "kid with a query": ("token-kid", lambda: token(kid="x' UNION SELECT 'first")),
    "kid with half a letter": ("token-kid", lambda: token(kid="\ud800")),
    "kid in another case": ("token-kid", lambda: token(kid="First")),
    "kid of 3000 letters": ("token-kid", lambda: token(kid="a" * 3000)),
    "extension that is not known": ("token-malformed", lambda: token(crit=["exp"], exp=0)),
    "payload left out": ("token-malformed", lambda: token(b64=False, crit=["b64"])),
    "huge": ("token-too-long", lambda: token(without(padding="x" * 8192))),
    "two parts": ("token-malformed", lambda: token().rpartition(".")[0]),
    "four parts": ("token-malformed", lambda: f"{token()}.x"),
    "five parts, as if encrypted": ("token-malformed", lambda: f"{token()}.x.x"),
    "header that is no object": ("token-malformed", lambda: b".".join((part([]), part(CLAIMS), part(b"x"))).decode()),
    "header that is no JSON": (
        "token-malformed",
        lambda: b".".join((part(b"\xff{"), part(CLAIMS), part(b"x"))).decode(),
    ),
    "header nested without end": (
        "token-malformed",
        lambda: b".".join((part(b'{"a":' + b"[" * 4000), part(CLAIMS), part(b"x"))).decode(),
    ),
    "claims that are no object": ("token-malformed", lambda: token([1])),
    "claims that are no JSON": ("token-malformed", lambda: token(b"\xff")),
    "standard base64": ("token-malformed", lambda: token().replace(".", "+.", 1)),
    "a space within": ("token-malformed", lambda: token().replace(".", ". ", 1)),
    "a line end": ("token-malformed", lambda: f"{token()}\n"),
    "two tokens": ("token-malformed", lambda: f"{token()}, Bearer {token()}"),
    "letters beyond ASCII": ("token-malformed", lambda: f"{token()}é"),
    "nonsense": ("token-malformed", lambda: "nonsense"),
}


@pytest.mark.parametrize("attack", ATTACKS)
def test_an_attack_is_refused_with_the_one_answer_that_says_nothing_more(gate, reasons, attack):
    reason, build = ATTACKS[attack]
    with pytest.raises(TokenError) as caught:
        gate.admit(bearer(build()), "assess")
    assert str(caught.value) == (
        "the token is not taken.\nSend a valid token of this service's issuer as Authorization: Bearer."
    )
    assert caught.value.headers == {"WWW-Authenticate": 'Bearer error="invalid_token"'}
    assert (caught.value.http_status, caught.value.error) == (401, "invalid_token")
    assert reasons == [reason]


def asked(client, text, path="/v1/rules", method="GET"):
    return client.open(method, path, headers={} if text is None else {"Authorization": bearer(text)})


def test_over_http_every_attack_gets_the_same_answer_but_for_its_request_id(gate):
    client, answers = Client(parts(callers=gate)), set()
    for attack, (_, build) in ATTACKS.items():
        text = build()
        if attack not in ("a line end", "letters beyond ASCII"):  # a client cannot send these in a header
            answer = asked(client, text)
            told = {**answer.json, "instance": ""}
            answers.add((answer.status_code, answer.headers["WWW-Authenticate"], json.dumps(told)))
    ((status, header, body),) = answers
    assert (status, header) == (401, 'Bearer error="invalid_token"')
    assert json.loads(body)["title"] == "Unauthorized"


def test_over_http_a_token_is_asked_for_and_its_scope_decides(gate):
    client = Client(parts(callers=gate))
    nobody = asked(client, None)
    assert (nobody.status_code, nobody.headers["WWW-Authenticate"]) == (401, "Bearer")
    too_little = asked(client, token())
    assert (too_little.status_code, too_little.json["fix"]) == (403, "Ask the issuer for a token with the scope rules.")
    assert 'scope="rules"' in too_little.headers["WWW-Authenticate"]
    assert asked(client, token(without(scope="rules"))).status_code == 200


def test_over_http_keys_that_cannot_be_had_are_no_fault_of_the_token(far_gate, issuer):
    issuer.fails = True
    answer = asked(Client(parts(callers=far_gate)), token())
    assert (answer.status_code, answer.headers["Retry-After"]) == (503, "60")


def test_only_liveness_readiness_and_the_document_are_open(gate):
    client = Client(parts(callers=gate))
    for path, status in (("/healthz", 200), ("/readyz", 200), ("/openapi.json", 200), ("/metrics", 401)):
        assert asked(client, None, path).status_code == status
    closed = [
        (method.upper(), path.replace("{card_id}", "0" * 24).replace("{id}", "p1").replace("{rule}", "start-mra"))
        for path, methods in DOCUMENT["paths"].items()
        for method in methods
        if path.startswith("/v1/")
    ]
    assert len(closed) >= 7
    for method, path in closed:
        assert asked(client, None, path, method).status_code == 401, path


EDGES = [
    ({"exp": AT - 29}, True),
    ({"exp": AT - 30}, False),
    ({"exp": AT - 29.5}, True),
    ({"exp": 10**400}, True),
    ({"iat": AT + 30}, True),
    ({"iat": AT + 31}, False),
    ({"nbf": AT + 30}, True),
    ({"nbf": AT + 31}, False),
]


@pytest.mark.parametrize(("claims", "is_good"), EDGES)
def test_times_hold_to_the_second_with_thirty_seconds_for_clocks_that_differ(gate, claims, is_good):
    assert is_let_in(gate, token(without(**claims))) is is_good


def test_a_token_lives_by_the_clock_handed_in(gate, clock):
    clock.moment = NOON + timedelta(seconds=629)
    assert is_let_in(gate, token())
    clock.moment = NOON + timedelta(seconds=630)
    assert not is_let_in(gate, token())


def test_a_site_that_takes_one_algorithm_refuses_the_other(key_file, clock):
    tokens = TokenSettings(issuer=ISSUER, audience=AUDIENCE, jwks=key_file, algorithms=("ES384",))
    gate = Gatekeeper(tokens, now=clock, fetch_keys=must_not_fetch)
    assert not is_let_in(gate, token())
    assert is_let_in(gate, token(key=curve_key(), signed_as="ES384", alg="ES384", kid="curve"))


# Which keys are taken


UNUSABLE = {
    "for encryption": lambda: public(rsa_key(), "k", use="enc"),
    "for no use said": lambda: public(rsa_key(), "k", use=None),
    "without a kid": lambda: public(rsa_key(), None),
    "with a number for a kid": lambda: public(rsa_key(), 7),
    "RSA of 1024 bits": lambda: public(rsa_key("small", 1024), "k"),
    "RSA for another algorithm": lambda: public(rsa_key(), "k", alg="RS512"),
    "on a smaller curve": lambda: public(curve_key("small", ec.SECP256R1), "k"),
    "on a smaller curve that says otherwise": lambda: public(curve_key("small", ec.SECP256R1), "k", crv="P-384"),
    "off the curve": lambda: public(curve_key(), "k", x=public(curve_key(), "k")["y"]),
    "private": lambda: {**RSAAlgorithm.to_jwk(rsa_key(), as_dict=True), "kid": "k", "use": "sig"},
    "a shared secret": lambda: {"kty": "oct", "k": "c2VjcmV0", "kid": "k", "use": "sig", "alg": "HS256"},
    "half a key": lambda: {"kty": "RSA", "kid": "k", "use": "sig", "e": "AQAB"},
    "a key of numbers": lambda: {"kty": "RSA", "kid": "k", "use": "sig", "e": 65537, "n": 7},
    "no base64": lambda: {"kty": "RSA", "kid": "k", "use": "sig", "e": "AQAB", "n": "é"},
    "with an even exponent": lambda: public(rsa_key(), "k", e="Ag"),
    "no object": lambda: "k",
}


@pytest.mark.parametrize("what", UNUSABLE)
def test_a_key_that_is_of_no_use_is_left_out_and_the_others_serve(what):
    found = usable_keys(key_set(UNUSABLE[what](), public(rsa_key(), "good")))
    assert set(found) == {("good", "RS256")}


def test_the_first_of_two_keys_with_one_name_counts():
    found = usable_keys(key_set(public(rsa_key(), "k"), public(rsa_key("second"), "k"), public(curve_key(), "k")))
    assert found[("k", "RS256")].public_numbers() == rsa_key().public_key().public_numbers()
    assert set(found) == {("k", "RS256"), ("k", "ES384")}


@pytest.mark.parametrize("data", [b"", b"[]", b"{}", b'{"keys": {}}', b"<html>", b"\xff", b'{"keys":' + b"[" * 100_000])
def test_what_is_no_key_set_is_said_not_to_be_one(data):
    with pytest.raises(KeysUnavailableError):
        usable_keys(data)


# Keys in a file


@pytest.mark.parametrize("content", [None, b"", b"not json", b'{"keys": []}', key_set({"kty": "oct"}), b" " * 300_000])
def test_a_key_file_of_no_use_keeps_the_service_from_starting(tmp_path, clock, content):
    path = tmp_path / "keys.json"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(SettingsError, match="GDMT_CARDS_TOKEN_JWKS: the file holds no usable key"):
        Gatekeeper(TokenSettings(issuer=ISSUER, audience=AUDIENCE, jwks=path), now=clock, fetch_keys=must_not_fetch)


def put(path, data):
    """Replace the file at once, as a careful operator does."""
    path.with_suffix(".new").write_bytes(data)
    os.replace(path.with_suffix(".new"), path)  # noqa: PTH105


def test_a_key_file_that_was_replaced_holds_from_the_next_request_on(gate, key_file):
    old, new = token(), token(key=rsa_key("second"), kid="second")
    assert (is_let_in(gate, old), is_let_in(gate, new)) == (True, False)
    put(key_file, key_set(public(rsa_key(), "first"), public(rsa_key("second"), "second")))
    assert (is_let_in(gate, old), is_let_in(gate, new)) == (True, True)
    put(key_file, key_set(public(rsa_key("second"), "second")))
    assert (is_let_in(gate, old), is_let_in(gate, new)) == (False, True)
    put(key_file, key_set())
    assert (is_let_in(gate, old), is_let_in(gate, new)) == (False, False)


@pytest.mark.parametrize("ruin", [lambda path: path.unlink(), lambda path: put(path, b'{"keys": [')])
def test_a_key_file_that_is_gone_or_broken_serves_five_minutes_more_and_again_once_it_is_back(
    gate, key_file, clock, reasons, ruin
):
    whole = key_file.read_bytes()
    long_lived = token(without(exp=AT + 86_400))
    assert is_let_in(gate, long_lived)
    clock.moment = NOON + HOUR
    assert is_let_in(gate, long_lived)
    ruin(key_file)
    clock.moment += timedelta(minutes=5)
    assert is_let_in(gate, long_lived)
    clock.moment += SECOND
    with pytest.raises(KeysUnavailableError) as caught:
        gate.admit(bearer(long_lived), "assess")
    assert (caught.value.http_status, caught.value.headers) == (503, {"Retry-After": "60"})
    assert reasons
    assert set(reasons) <= {"keys-unreadable", "keys-not-a-set"}
    put(key_file, whole)
    assert is_let_in(gate, long_lived)


# Keys at an address


class Issuer:
    """The issuer's address: counts how often it is asked, and fails when told to."""

    def __init__(self):
        self.data = key_set(public(rsa_key(), "first"))
        self.fails = False
        self.asked = 0

    def __call__(self, url):
        assert url == ADDRESS
        self.asked += 1
        if self.fails:
            raise KeysUnavailableError("keys-unreachable")
        return self.data


@pytest.fixture
def issuer():
    return Issuer()


@pytest.fixture
def far_gate(issuer, clock, reasons):
    tokens = TokenSettings(issuer=ISSUER, audience=AUDIENCE, jwks=ADDRESS)
    return Gatekeeper(tokens, now=clock, fetch_keys=issuer, tell=reasons.append)


LONG_LIVED = without(exp=AT + 7 * 86_400)


def test_keys_are_fetched_once_for_many_requests(far_gate, issuer):
    assert all(is_let_in(far_gate, token()) for _ in range(20))
    assert issuer.asked == 1


def test_a_token_that_names_no_key_and_no_token_at_all_fetch_nothing(far_gate, issuer):
    for text in ("nonsense", token(kid=None), token(kid=""), token(kid="k" * 257), token(alg="HS256"), "x" * 9000):
        assert not is_let_in(far_gate, text)
    assert issuer.asked == 0


def test_a_new_key_is_found_when_its_first_token_comes(far_gate, issuer, clock):
    assert is_let_in(far_gate, token())
    clock.moment += MINUTE
    issuer.data = key_set(public(rsa_key(), "first"), public(rsa_key("second"), "second"))
    assert is_let_in(far_gate, token(key=rsa_key("second"), kid="second"))
    assert is_let_in(far_gate, token())
    assert issuer.asked == 2


def test_made_up_keys_are_asked_for_at_most_once_a_minute(far_gate, issuer, clock):
    assert is_let_in(far_gate, token())
    for minute in (1, 2, 3):
        clock.moment = NOON + minute * MINUTE - SECOND
        assert not any(is_let_in(far_gate, token(kid=f"made-up-{n}")) for n in range(20))
        assert issuer.asked == minute
        clock.moment += SECOND
        assert not any(is_let_in(far_gate, token(kid=f"made-up-{n}")) for n in range(20))
        assert issuer.asked == minute + 1


def test_a_key_the_issuer_withdrew_is_refused_within_ten_minutes(far_gate, issuer, clock):
    assert is_let_in(far_gate, token(LONG_LIVED))
    issuer.data = key_set(public(rsa_key("second"), "second"))
    clock.moment = NOON + 10 * MINUTE - SECOND
    assert is_let_in(far_gate, token(LONG_LIVED))
    clock.moment += SECOND
    assert not is_let_in(far_gate, token(LONG_LIVED))


def test_while_the_address_fails_old_keys_serve_for_six_hours_and_no_longer(far_gate, issuer, clock, reasons):
    assert is_let_in(far_gate, token(LONG_LIVED))
    issuer.fails = True
    clock.moment = NOON + 6 * HOUR
    assert is_let_in(far_gate, token(LONG_LIVED))
    assert not is_let_in(far_gate, token(LONG_LIVED, kid="made-up"))
    clock.moment += SECOND
    with pytest.raises(KeysUnavailableError):
        far_gate.caller(bearer(token(LONG_LIVED)))
    assert reasons == ["keys-unreachable"]
    issuer.fails = False
    clock.moment += MINUTE
    assert is_let_in(far_gate, token(LONG_LIVED))


def test_an_address_that_gives_rubbish_is_one_that_fails(far_gate, issuer, clock, reasons):
    assert is_let_in(far_gate, token(LONG_LIVED))
    issuer.data = b"<html>maintenance</html>"
    clock.moment += HOUR
    assert is_let_in(far_gate, token(LONG_LIVED))
    assert reasons == ["keys-not-a-set"]


def test_an_address_out_of_reach_at_the_start_keeps_everyone_waiting_and_nobody_refused(far_gate, issuer, clock):
    issuer.fails = True
    for _ in range(5):
        with pytest.raises(KeysUnavailableError):
            far_gate.admit(bearer(token()), "assess")
    assert issuer.asked == 1
    issuer.fails = False
    clock.moment += MINUTE
    assert far_gate.admit(bearer(token()), "assess")


def test_a_clock_that_was_set_back_does_not_stop_the_fetching(far_gate, issuer, clock):
    clock.moment = NOON + 24 * HOUR
    assert not is_let_in(far_gate, token())
    clock.moment = NOON
    assert is_let_in(far_gate, token())
    assert issuer.asked == 2


def test_who_has_a_key_does_not_wait_while_another_fetches(clock):
    started, release = threading.Event(), threading.Event()
    data = key_set(public(rsa_key(), "first"))
    asked = []

    def fetch(url):
        asked.append(url)
        if len(asked) > 1:
            started.set()
            assert release.wait(10)
        return data

    gate = Gatekeeper(TokenSettings(issuer=ISSUER, audience=AUDIENCE, jwks=ADDRESS), now=clock, fetch_keys=fetch)
    assert is_let_in(gate, token(LONG_LIVED))
    clock.moment += 11 * MINUTE
    slow = threading.Thread(target=is_let_in, args=(gate, token(LONG_LIVED)))
    slow.start()
    assert started.wait(10)
    assert is_let_in(gate, token(LONG_LIVED))
    release.set()
    slow.join(10)
    assert len(asked) == 2


def test_those_who_come_together_with_a_new_key_wait_for_one_fetch():
    all_came, good, asked, looks = threading.Event(), [], [], []

    def clock():
        looks.append(1)
        if len(looks) >= 7:  # six who came, and one of them again before the fetch
            all_came.set()
        return NOON + len(asked) * SECOND

    def fetch(url):
        assert all_came.wait(10)
        asked.append(url)
        return key_set(public(rsa_key(), "first"))

    gate = Gatekeeper(TokenSettings(issuer=ISSUER, audience=AUDIENCE, jwks=ADDRESS), now=clock, fetch_keys=fetch)
    text = token()
    threads = [threading.Thread(target=lambda: good.append(is_let_in(gate, text))) for _ in range(6)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(10)
    assert good == [True] * 6
    assert len(asked) == 1


# Fetching over HTTP


def test_a_key_set_is_fetched_whole_and_without_a_login(httpserver, tmp_path, monkeypatch):
    (tmp_path / "netrc").write_text(f"machine {httpserver.host} login ehr password secret\n")
    (tmp_path / "netrc").chmod(0o600)
    monkeypatch.setenv("NETRC", str(tmp_path / "netrc"))
    data = key_set(*(public(rsa_key(), f"k{n}") for n in range(100)))
    httpserver.expect_oneshot_request("/keys").respond_with_data(data)
    assert fetch_key_set(httpserver.url_for("/keys")) == data
    ((request, _),) = httpserver.log
    assert "Authorization" not in request.headers


def failure(url):
    with pytest.raises(KeysUnavailableError) as caught:
        fetch_key_set(url)
    return caught.value.reason


def test_a_redirect_is_not_followed(httpserver):
    moved = Response(status=302, headers={"Location": httpserver.url_for("/elsewhere")})
    httpserver.expect_request("/keys").respond_with_response(moved)
    httpserver.expect_request("/elsewhere").respond_with_data(key_set())
    assert failure(httpserver.url_for("/keys")) == "keys-status"
    assert [request.path for request, _ in httpserver.log] == ["/keys"]


@pytest.mark.parametrize("status", [204, 404, 500])
def test_another_status_gives_no_keys(httpserver, status):
    httpserver.expect_request("/keys").respond_with_data(b"", status=status)
    assert failure(httpserver.url_for("/keys")) == "keys-status"


@pytest.mark.parametrize("is_in_pieces", [True, False])
def test_a_key_set_without_end_is_given_up(httpserver, is_in_pieces):
    def endless(_request):
        pieces = (b" " * 65_536 for _ in range(1000)) if is_in_pieces else b" " * 1_000_000
        return Response(pieces)

    httpserver.expect_request("/keys").respond_with_handler(endless)
    assert failure(httpserver.url_for("/keys")) == "keys-too-large"


def test_a_key_set_that_trickles_is_given_up(httpserver, monkeypatch):
    monkeypatch.setattr(jwks, "FETCH_SECONDS", 0.5)
    enough = threading.Event()

    def trickle(_request):
        def pieces():
            for _ in range(100):
                enough.wait(0.05)
                yield b" "

        return Response(pieces())

    httpserver.expect_request("/keys").respond_with_handler(trickle)
    assert failure(httpserver.url_for("/keys")) == "keys-too-slow"
    enough.set()


def test_an_address_where_nobody_listens_gives_no_keys():
    assert failure("http://127.0.0.1:9/keys") == "keys-unreachable"
