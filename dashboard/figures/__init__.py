"""Figures drawn on the server: frozen descriptions in, SVG text out.

Start with `trail.py` (how an answer came to stand where it stands) and `forest.py` (the estimates behind it).
Both lean on `scales.py` (where a number falls on the sheet), `numbers.py` (how a number is written), `svg.py`
(elements as text, always escaped) and `tables.py` (the same data as rows, for the page and for CSV).

Nothing here knows Django, the database or the analysis: a view fills in the dataclasses with numbers already on the
scale a reader sees. The SVG carries classes only, no style attribute and no script, so that a strict content security
policy holds; `stylesheet.py` puts the rules inside the file when it is downloaded and leaves the page behind.
"""
