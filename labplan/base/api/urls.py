from django.urls import path

from labplan.base.api.docs import DocumentationPage, OpenApiDocument
from labplan.base.api.projects import ProjectDetail, ProjectList
from labplan.base.api.tokens import Login, TokenList, TokenRevoke

urlpatterns = [
    path("openapi.json", OpenApiDocument.as_view(), name="openapi-document"),
    path("docs/", DocumentationPage.as_view(), name="documentation-page"),
    path("login/", Login.as_view(), name="login"),
    path("tokens/", TokenList.as_view(), name="token-list"),
    path("tokens/<int:token_id>/revoke/", TokenRevoke.as_view(), name="token-revoke"),
    path("projects/", ProjectList.as_view(), name="project-list"),
    path("projects/<slug:code>/", ProjectDetail.as_view(), name="project-detail"),
]
