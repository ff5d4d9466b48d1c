"""The jobs, as thin as they can be: each takes a number at most, calls one function, and may run twice."""

from celery import shared_task

from analysis import recompute as requests
from evidence.operations.people import forget_old_failures


@shared_task(name="analysis.tasks.recompute", max_retries=3)
def recompute(request_id: int) -> None:
    requests.run(request_id)


@shared_task(name="analysis.tasks.sweep", max_retries=0, ignore_result=True)
def sweep() -> None:
    requests.sweep()


@shared_task(name="analysis.tasks.forget_sign_in_failures", max_retries=0)
def forget_sign_in_failures() -> None:
    forget_old_failures()
