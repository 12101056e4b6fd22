"""levelbook's half on the desk: the book of tank levels, its figures and its papers."""
