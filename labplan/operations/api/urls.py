from django.urls import path

from labplan.operations.api import health

# Included twice: at the root, and under the prefix for proxies that forward nothing else.
health_urls = [
    path("health/live/", health.Live.as_view(), name="health-live"),
    path("health/ready/", health.Ready.as_view(), name="health-ready"),
]
metrics_urls = [path("metrics", health.Metrics.as_view(), name="metrics")]
