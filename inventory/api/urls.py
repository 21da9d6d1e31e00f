from django.urls import path

from inventory.api import moving, reserving, views

urlpatterns = [
    path("substances/", views.SubstanceList.as_view(), name="substance-list"),
    path("substances/<slug:code>/", views.SubstanceDetail.as_view(), name="substance-detail"),
    path(
        "substances/<slug:code>/minimum/",
        moving.SubstanceMinimum.as_view(),
        name="substance-minimum",
    ),
    path("bottles/", moving.BottleList.as_view(), name="bottle-list"),
    path("bottles/<str:code>/", views.BottleDetail.as_view(), name="bottle-detail"),
    path("bottles/<str:code>/movements/", moving.MovementList.as_view(), name="movement-list"),
    path("bottles/<str:code>/readings/", moving.ReadingList.as_view(), name="reading-list"),
    path("bottles/<str:code>/decant/", moving.BottleDecant.as_view(), name="bottle-decant"),
    path("bottles/<str:code>/status/", moving.BottleStatus.as_view(), name="bottle-status"),
    path("counts/", moving.StockCount.as_view(), name="stock-count"),
    path("places/", views.PlaceList.as_view(), name="place-list"),
    path("reservations/", reserving.ReservationList.as_view(), name="reservation-list"),
    path(
        "reservations/<uuid:code>/",
        reserving.ReservationDetail.as_view(),
        name="reservation-detail",
    ),
    path(
        "reservations/<uuid:code>/use/", reserving.ReservationUse.as_view(), name="reservation-use"
    ),
    path(
        "reservations/<uuid:code>/release/",
        reserving.ReservationRelease.as_view(),
        name="reservation-release",
    ),
    path(
        "reservations/<uuid:code>/extend/",
        reserving.ReservationExtend.as_view(),
        name="reservation-extend",
    ),
    path("quotas/", reserving.QuotaList.as_view(), name="quota-list"),
    path("notices/", reserving.NoticeList.as_view(), name="notice-list"),
    path("notices/<int:number>/read/", reserving.NoticeRead.as_view(), name="notice-read"),
]
