from django.urls import path, re_path

from .views import approval, instruments, materials, procedures, shelf

app_name = "spectra"
urlpatterns = [
    path("shelf/", shelf.shelf, name="shelf"),
    path("shelf/new/", shelf.new_reference, name="new_reference"),
    path("shelf/<int:pk>/", shelf.reference, name="reference"),
    path("materials/", materials.materials, name="materials"),
    path("materials/new/", materials.new_material, name="new_material"),
    path("materials/structure/", materials.structure, name="structure"),
    path("materials/watch-lists/", materials.watch_lists, name="watch_lists"),
    path("materials/watch-lists/new/", materials.new_watch_list, name="new_watch_list"),
    path("materials/watch-lists/<int:pk>/", materials.watch_list, name="watch_list"),
    path(
        "materials/watch-lists/<int:pk>/new-version/", materials.new_watch_list_version, name="new_watch_list_version"
    ),
    path("materials/<int:pk>/", materials.material, name="material"),
    path("materials/<int:pk>/change/", materials.change_material, name="change_material"),
    path("materials/<int:pk>/new-version/", materials.new_material_version, name="new_material_version"),
    path("materials/<int:pk>/retire/", materials.retire_material, name="retire_material"),
    path("procedures/", procedures.procedures, name="procedures"),
    path("procedures/new/", procedures.new_procedure, name="new_procedure"),
    path("procedures/methods/", procedures.methods, name="methods"),
    path("procedures/methods/load/", procedures.load_method, name="load_method"),
    path("procedures/methods/new/", procedures.new_method, name="new_method"),
    path("procedures/methods/<int:pk>/", procedures.method, name="method"),
    path("procedures/methods/<int:pk>/new-version/", procedures.new_method, name="new_method_version"),
    path("procedures/group-table/", procedures.group_tables, name="group_tables"),
    path("procedures/group-table/load/", procedures.load_group_table, name="load_group_table"),
    path("procedures/group-table/new/", procedures.new_group_table, name="new_group_table"),
    path("procedures/group-table/<int:pk>/", procedures.group_table, name="group_table"),
    path("procedures/group-table/<int:pk>/new-version/", procedures.new_group_table, name="new_group_table_version"),
    path("procedures/<int:pk>/", procedures.procedure, name="procedure"),
    path("procedures/<int:pk>/new-edition/", procedures.new_edition, name="new_edition"),
    path("instruments/", instruments.instruments, name="instruments"),
    path("instruments/new/", instruments.new_instrument, name="new_instrument"),
    path("instruments/<int:pk>/", instruments.instrument, name="instrument"),
    path("instruments/<int:pk>/qualification/", instruments.new_qualification, name="new_qualification"),
    path("instruments/accessories/<int:pk>/check/", instruments.new_check, name="new_check"),
    path("approve/<str:kind>/<int:pk>/", approval.approve, name="approve"),
    re_path(r"^raw/(?P<sha256>[0-9a-f]{64})/$", shelf.raw_file, name="raw_file"),
]
