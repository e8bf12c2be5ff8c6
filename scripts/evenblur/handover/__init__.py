"""The bag for the auditor: a run's tables, records, phantoms and identities, packed for any tool to verify."""
