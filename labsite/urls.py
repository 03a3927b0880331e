"""Every address. Tests hold them against the roles."""

from django.urls import include, path

from . import views

urlpatterns = [
    path("", views.home, name="home"),
    path("health/", views.health, name="health"),
    path("", include("labsite.accounts.urls")),
    path("trail/", include("labsite.trail.urls")),
    path("", include("spectra.urls")),
    path("", include("reviews.urls")),
]

handler400 = "labsite.views.not_understood"
handler403 = "labsite.views.not_allowed"
handler404 = "labsite.views.not_found"
handler500 = "labsite.views.server_error"
