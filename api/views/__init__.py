"""The views, by resource. Each method reads: validate, authorise, one operation or query, render.

Authorisation comes before validation, since what a stranger sends is nobody's business: ``base`` does it for every
view.
"""
