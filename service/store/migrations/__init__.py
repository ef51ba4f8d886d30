"""Migrations of the metadata, run by `service.store.database`."""
