"""How each kind of phantom tells a scanner's resolution: one module a kind, numpy in, widths out."""
