from django.urls import path

from . import views

app_name = "accounts"
urlpatterns = [
    path("sign-in/", views.sign_in, name="sign_in"),
    path("sign-out/", views.sign_out, name="sign_out"),
    path("profile/", views.profile, name="profile"),
    path("profile/password/", views.change_password, name="change_password"),
    path("people/", views.people, name="people"),
    path("people/new/", views.new_person, name="new_person"),
    path("people/small-laboratory/", views.small_laboratory, name="small_laboratory"),
    path("people/<int:user_id>/", views.person, name="person"),
    path("people/<int:user_id>/grant/", views.grant_role, name="grant_role"),
    path("people/<int:user_id>/revoke/", views.revoke_role, name="revoke_role"),
    path("people/<int:user_id>/deactivate/", views.deactivate, name="deactivate"),
    path("people/<int:user_id>/reactivate/", views.reactivate, name="reactivate"),
    path("people/<int:user_id>/reset-password/", views.reset_password, name="reset_password"),
]
