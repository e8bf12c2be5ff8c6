"""The study folder: its settings, its tables, the identities of its images, and the plan made from them."""
