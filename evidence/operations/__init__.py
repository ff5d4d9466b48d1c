"""Every write to the register: one function, one transaction, one change number.

``people`` and ``tokens`` (who may act), ``bases``, ``questions``, ``papers``, ``studies``,
``estimates``, ``eligibility``.
Operations take an ``Access`` (see ``evidence.policy``) and ask it themselves, so that pages, programs and scripts are
refused alike. They raise ``evidence.errors`` and nothing of HTTP.
"""
