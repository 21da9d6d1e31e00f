"""Every address labplan serves."""

from django.urls import include, path

urlpatterns = [
    path("api/v1/", include("labplan.base.api.urls")),
    path("api/v1/", include("inventory.api.urls")),
    path("api/v1/", include("labplan.procedures.api.urls")),
]
handler404 = "labplan.base.problems.not_found"
handler500 = "labplan.base.problems.server_error"
