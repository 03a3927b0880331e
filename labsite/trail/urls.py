from django.urls import path

from . import views

app_name = "trail"
urlpatterns = [
    path("", views.search, name="search"),
    path("verify/", views.verify, name="verify"),
    path("export/", views.export, name="export"),
    path("<int:seq>/", views.entry, name="entry"),
    path("record/<str:kind>/<str:subject_id>/", views.record, name="record"),
]
