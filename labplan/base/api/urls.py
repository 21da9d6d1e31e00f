from django.urls import path

from labplan.base.api.docs import DocumentationPage, OpenApiDocument
from labplan.base.api.projects import ProjectDetail, ProjectList

urlpatterns = [
    path("openapi.json", OpenApiDocument.as_view(), name="openapi-document"),
    path("docs/", DocumentationPage.as_view(), name="documentation-page"),
    path("projects/", ProjectList.as_view(), name="project-list"),
    path("projects/<slug:code>/", ProjectDetail.as_view(), name="project-detail"),
]
