"""Replies, shown cards, and the check of the secret."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

from cds.store.failures import StoreError

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Make the first tables."""
    op.create_table(
        "replies",
        sa.Column("number", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("id", sa.Text(), nullable=False),
        sa.Column("patient_key", sa.Text(), nullable=False),
        sa.Column("patient_reference", sa.Text()),
        sa.Column("card_key", sa.Text(), nullable=False),
        sa.Column("card_sealed", sa.Text(), nullable=False),
        sa.Column("rule", sa.Text(), nullable=False),
        sa.Column("about", sa.Text()),
        sa.Column("code", sa.Text(), nullable=False),
        sa.Column("reason", sa.Text()),
        sa.Column("text", sa.Text()),
        sa.Column("until", sa.Date()),
        sa.Column("facts", sa.Text(), nullable=False),
        sa.Column("made_at", sa.DateTime(timezone=True), nullable=False),
        sa.Column("made_by_key", sa.Text()),
        sa.PrimaryKeyConstraint("number", name="replies_pkey"),
        sa.UniqueConstraint("id", name="replies_id_key"),
    )
    op.create_index("replies_patient_key_index", "replies", ["patient_key"])
    op.create_index("replies_made_at_index", "replies", ["made_at"])
    op.create_table(
        "shown_cards",
        sa.Column("patient_key", sa.Text(), nullable=False),
        sa.Column("card_key", sa.Text(), nullable=False),
        sa.Column("card_sealed", sa.Text(), nullable=False),
        sa.Column("rule", sa.Text(), nullable=False),
        sa.Column("about", sa.Text()),
        sa.Column("tier", sa.Text(), nullable=False),
        sa.Column("facts", sa.Text(), nullable=False),
        sa.Column("first_shown_on", sa.Date(), nullable=False),
        sa.Column("last_shown_on", sa.Date(), nullable=False),
        sa.PrimaryKeyConstraint("patient_key", "card_key", name="shown_cards_pkey"),
    )
    op.create_index("shown_cards_last_shown_on_index", "shown_cards", ["last_shown_on"])
    op.create_table(
        "secret_check",
        sa.Column("id", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("value", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("id", name="secret_check_pkey"),
    )


def downgrade() -> None:
    """Refuse: nothing is before this version, so every answer ever given would be lost."""
    raise StoreError(
        "going back before the first version of the store would throw every reply away",
        "Restore the database from a backup, or point the store's URL at a new one.",
    )
