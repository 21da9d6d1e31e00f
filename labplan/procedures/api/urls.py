from django.urls import path

from labplan.procedures.api import views

urlpatterns = [
    path("routes/", views.RoutePreview.as_view(), name="route-preview"),
    path("procedures/", views.ProcedureList.as_view(), name="procedure-list"),
    path("procedures/<str:code>/", views.ProcedureDetail.as_view(), name="procedure-detail"),
    path(
        "procedures/<str:code>/document/",
        views.ProcedureDocument.as_view(),
        name="procedure-document",
    ),
    path(
        "procedures/<str:code>/sheet.html",
        views.ProcedureSheetHtml.as_view(),
        name="procedure-sheet-html",
    ),
    path(
        "procedures/<str:code>/sheet.pdf",
        views.ProcedureSheetPdf.as_view(),
        name="procedure-sheet-pdf",
    ),
    path("procedures/<str:code>/cancel/", views.ProcedureCancel.as_view(), name="procedure-cancel"),
]
