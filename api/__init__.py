"""The REST service under /api/v1/: one thin layer over the operations and queries of evidence and analysis.

``urls`` lists the routes. A request passes ``authentication`` (who), ``permissions`` (may they), ``parsers`` (is it
JSON within bounds), a serializer (is it the right shape), one operation or query, and another serializer on the way
out. Everything that goes wrong leaves through ``problems``, with a code listed in ``codes``. ``moments`` is as_of,
``pagination`` the pages, ``schema`` the OpenAPI description. Nothing here decides anything about evidence.
"""
