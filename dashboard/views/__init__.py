"""One module a subject; `urls.py` says which address leads where."""
