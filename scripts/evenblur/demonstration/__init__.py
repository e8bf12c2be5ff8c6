"""The invented study of the repository's own `config/`: what each image shows is known, because a rule makes it."""
