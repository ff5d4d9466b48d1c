"""What is held: papers, studies, estimates, codings and decisions, who said so, and since when.

Start with ``models`` (what the tables promise), then ``changes`` (how a fact gets its number), ``operations``
(every write) and ``queries`` (every read, always at a moment). Nothing here knows how a number is pooled:
that is ``analysis``, which imports this package and is never imported by it.
"""
