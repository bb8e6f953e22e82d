"""The text of the languages that routines are written in."""
