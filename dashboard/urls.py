"""Addresses of the pages. The nouns and their order are those of the REST service."""

from django.urls import include, path

from dashboard.views import bases, changes, papers, questions, signing_in, work

app_name = "dashboard"

in_a_base = [
    path("", bases.base, name="base"),
    path("questions/<slug:slug>/", questions.question, name="question"),
    path("questions/<slug:slug>/forest/", questions.forest, name="forest"),
    path("questions/<slug:slug>/trail.svg", questions.trail_svg, name="trail-svg"),
    path("questions/<slug:slug>/trail.csv", questions.trail_csv, name="trail-csv"),
    path("questions/<slug:slug>/forest.svg", questions.forest_svg, name="forest-svg"),
    path("questions/<slug:slug>/forest.csv", questions.forest_csv, name="forest-csv"),
    path("questions/<slug:slug>/protocols/<int:number>/", questions.protocol, name="protocol"),
    path("papers/", papers.papers, name="papers"),
    path("papers/<uuid:paper>/", papers.paper, name="paper"),
    path("changes/", changes.changes, name="changes"),
    path("work/", work.work, name="work"),
    path("work/<int:request_id>/", work.request_state, name="request-state"),
    path("work/<int:request_id>/retry/", work.retry, name="retry"),
]

urlpatterns = [
    path("", bases.home, name="home"),
    path("sign-in/", signing_in.sign_in, name="sign-in"),
    path("sign-out/", signing_in.sign_out, name="sign-out"),
    path("evidence-bases/<slug:base>/", include(in_a_base)),
]
