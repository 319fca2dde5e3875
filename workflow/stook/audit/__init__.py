"""Audit: ledger, verify and the independent plain path."""
