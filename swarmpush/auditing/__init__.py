"""The audit: point world against body world, assumption by assumption."""
