"""Surveys with known answers: an invented ground, the traces a radar would record over it, the crew's folder."""
