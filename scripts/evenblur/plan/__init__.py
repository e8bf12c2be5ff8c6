"""The plan: which phantom session speaks for which scan, the common target, and every period's kernel."""
