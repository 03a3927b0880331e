"""Addresses of Today, Deliveries, Samples, Bench and Review."""

from django.urls import path

from reviews.views import bench, receiving, review, today

app_name = "reviews"
urlpatterns = [
    path("today/", today.today, name="today"),
    path("samples/", receiving.samples, name="samples"),
    path("samples/<int:pk>/", receiving.sample, name="sample"),
    path("deliveries/new/", receiving.register_delivery, name="register_delivery"),
    path("deliveries/<int:pk>/", receiving.delivery, name="delivery"),
    path("examinations/<int:pk>/upload/", receiving.upload, name="upload"),
    path("uploads/<int:pk>/answer/", receiving.answer_upload, name="answer_upload"),
    path("spectra/<int:pk>/row/", receiving.spectrum_row, name="spectrum_row"),
    path("spectra/<int:pk>/role/", receiving.change_role, name="change_role"),
    path("spectra/<int:pk>/bench/", bench.bench, name="bench"),
    path("spectra/<int:pk>/progress/", bench.analysis_progress, name="analysis_progress"),
    path("analyses/<int:pk>/plot/", bench.plot, name="plot"),
    path("analyses/<int:pk>/retry/", receiving.retry, name="retry"),
    path("interpretations/<int:pk>/", bench.version, name="version"),
    path("interpretations/<int:pk>/claims/add/", bench.add_claim, name="add_claim"),
    path("interpretations/<int:pk>/claims/confirm/", bench.confirm_uneventful, name="confirm_uneventful"),
    path("interpretations/<int:pk>/claims/<int:claim_pk>/confirm/", bench.confirm_claim, name="confirm_claim"),
    path("interpretations/<int:pk>/claims/<int:claim_pk>/change/", bench.change_claim, name="change_claim"),
    path("interpretations/<int:pk>/claims/<int:claim_pk>/remove/", bench.remove_claim, name="remove_claim"),
    path("interpretations/<int:pk>/conclusion/", bench.write_conclusion, name="write_conclusion"),
    path("interpretations/<int:pk>/submit/", bench.submit, name="submit"),
    path("interpretations/<int:pk>/review/", review.review, name="review"),
    path("interpretations/<int:pk>/take/", review.take, name="take"),
    path("interpretations/<int:pk>/hand-back/", review.hand_back, name="hand_back"),
    path("interpretations/<int:pk>/points/<int:point_pk>/open/", review.open_point, name="open_point"),
    path("interpretations/<int:pk>/points/<int:point_pk>/judge/", review.judge_point, name="judge_point"),
    path("interpretations/<int:pk>/points/<int:point_pk>/answer/", review.answer_point, name="answer_point"),
    path("interpretations/<int:pk>/points/<int:point_pk>/settle/", review.settle_point, name="settle_point"),
    path("interpretations/<int:pk>/approve/", review.approve, name="approve"),
    path("interpretations/<int:pk>/reject/", review.reject, name="reject"),
    path("interpretations/<int:pk>/withdraw/", review.withdraw, name="withdraw"),
    path("interpretations/<int:pk>/revise/", receiving.revise, name="revise"),
]
