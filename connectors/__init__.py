"""How records come in: one file per kind of source, one written contract in ``base``."""
