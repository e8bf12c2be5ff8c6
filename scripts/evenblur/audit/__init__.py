"""The audit: from the records of a run to its tables and its report."""
