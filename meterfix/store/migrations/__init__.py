"""Alembic migrations of the ledger's tables; they travel inside the package."""
