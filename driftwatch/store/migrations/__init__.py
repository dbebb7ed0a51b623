"""Migrations of the database: one file a revision, each written out."""
