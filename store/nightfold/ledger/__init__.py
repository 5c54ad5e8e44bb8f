"""Writing and reading shots: the ingest rule, amendments, queries, edits, what was set aside."""
