"""What the store writes in place of names: keyed hashes to find rows by, and seals to give their content back.

Every key is derived from the one secret. A seal opens only with the secret and the patient's reference together, so the
database and the secret alone give back no card id, text or facts of a patient whose reference is not known.
"""

from __future__ import annotations

import base64
import hashlib
import hmac

from cryptography.fernet import Fernet, InvalidToken

from cds.store.failures import StoreError

SHORTEST_SECRET_BYTES = 16
_NO_MOMENT = 0  # a seal carries a moment; ours says nothing


class Keys:
    """The keys of one secret. Raises StoreError for a secret that could be guessed."""

    __slots__ = ("_card", "_maker", "_patient", "_seal", "check_value")

    def __init__(self, secret: bytes) -> None:
        if len(secret) < SHORTEST_SECRET_BYTES:
            raise StoreError(
                f"the store's secret is shorter than {SHORTEST_SECRET_BYTES} bytes",
                "Give 32 random bytes, and keep them as long as the data.",
            )
        self._patient = _keyed(secret, b"gdmt-cards store: patient")
        self._card = _keyed(secret, b"gdmt-cards store: card")
        self._maker = _keyed(secret, b"gdmt-cards store: made by")
        self._seal = _keyed(secret, b"gdmt-cards store: seal")
        self.check_value = _keyed(secret, b"gdmt-cards store: check").hex()

    def patient(self, reference: str) -> str:
        """The key under which a patient's rows stand."""
        return _keyed(self._patient, _bytes(reference)).hex()

    def card(self, card_id: str) -> str:
        """The key under which a card's rows stand."""
        return _keyed(self._card, _bytes(card_id)).hex()

    def maker(self, made_by: str) -> str:
        """The key of whoever made a reply; it cannot be turned back."""
        return _keyed(self._maker, _bytes(made_by)).hex()

    def seal_of(self, patient: str) -> Seal:
        """The seal of one patient's rows."""
        return Seal(Fernet(base64.urlsafe_b64encode(_keyed(self._seal, _bytes(patient)))))

    def is_check_value(self, written: str) -> bool:
        """Say whether the data were written with this secret."""
        return hmac.compare_digest(written.encode(), self.check_value.encode())


class Seal:
    """Closes and opens what stands in one patient's rows. The same text closed twice gives two different results."""

    __slots__ = ("_fernet",)

    def __init__(self, fernet: Fernet) -> None:
        self._fernet = fernet

    def close(self, text: str) -> str:
        return self._fernet.encrypt_at_time(_bytes(text), _NO_MOMENT).decode("ascii")

    def open(self, sealed: str) -> str:
        """Give the text back. Raises StoreError if the row was changed by another hand."""
        try:
            return self._fernet.decrypt(sealed.encode()).decode("utf-8", "surrogatepass")
        except InvalidToken:
            raise StoreError(
                "a row of the store was changed by something other than this program",
                "Restore the database from a backup.",
            ) from None


def _keyed(key: bytes, data: bytes) -> bytes:
    return hmac.new(key, data, hashlib.sha256).digest()


def _bytes(text: str) -> bytes:
    return text.encode("utf-8", "surrogatepass")
