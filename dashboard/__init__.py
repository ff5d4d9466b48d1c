"""The web pages: what a person meets.

`access.py` says who asks, about which evidence base and at which moment; `views/` fills the templates, one module a
subject; `drawings.py` turns answers into the descriptions that `figures/` draws; `words.py` and `printed.py` say codes
and readings in plain words. Pages only read the register, save for signing in and for asking that failed work is run
again; everything else is done through the REST service.
"""
