from django.urls import path

from labplan.base.api.projects import ProjectDetail, ProjectList

urlpatterns = [
    path("projects/", ProjectList.as_view(), name="project-list"),
    path("projects/<slug:code>/", ProjectDetail.as_view(), name="project-detail"),
]
