"""What we conclude: protocols, effects, syntheses, trails, and the jobs that keep them current.

The road through this package, in order: ``plans`` (what a protocol may say), ``protocols`` (adopting one), ``frames``
(the evidence of a question as of a moment), ``effects`` (a reading in the question's metric), ``synthesis`` (a pure
function of frame and plan), ``recompute`` (requests, claims, the sweep), ``answers`` (what pages and programs read),
``wording`` (the sentence). ``methods`` holds the numbers and knows nothing of the rest.
"""
