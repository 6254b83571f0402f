"""How results are written for people: digits, text and HTML."""
