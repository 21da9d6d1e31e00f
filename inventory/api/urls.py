from django.urls import path

from inventory.api import views

urlpatterns = [
    path("substances/", views.SubstanceList.as_view(), name="substance-list"),
    path("substances/<slug:code>/", views.SubstanceDetail.as_view(), name="substance-detail"),
    path("bottles/", views.BottleList.as_view(), name="bottle-list"),
    path("bottles/<str:code>/", views.BottleDetail.as_view(), name="bottle-detail"),
    path("bottles/<str:code>/movements/", views.MovementList.as_view(), name="movement-list"),
    path("places/", views.PlaceList.as_view(), name="place-list"),
    path("reservations/", views.ReservationList.as_view(), name="reservation-list"),
    path("reservations/<uuid:code>/", views.ReservationDetail.as_view(), name="reservation-detail"),
]
