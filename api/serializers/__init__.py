"""The shapes that come in and go out, apart: ``…In`` are what a client may send, ``…Out`` what it gets.

``fields`` and ``shapes`` hold what all share. A shape checks form only (is it text, is it short enough, is there no
unknown field); whether the register accepts the content is decided by the operation behind it.
"""
