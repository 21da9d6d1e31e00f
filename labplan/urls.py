"""Every address labplan serves."""

from django.urls import include, path

from labplan.operations.api.urls import health_urls, metrics_urls

urlpatterns = [
    path("", include(health_urls)),
    path("", include(metrics_urls)),
    path("api/v1/", include("labplan.base.api.urls")),
    path("api/v1/", include("inventory.api.urls")),
    path("api/v1/", include("labplan.procedures.api.urls")),
    path("api/v1/", include(health_urls)),
]
handler404 = "labplan.base.problems.not_found"
handler500 = "labplan.base.problems.server_error"
