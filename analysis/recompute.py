def request_recomputes(draft, questions):
    return []
