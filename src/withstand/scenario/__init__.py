"""Scenario files: their schema, loading them into a study and a plan, and scaffolding new ones."""
