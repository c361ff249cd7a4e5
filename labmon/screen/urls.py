"""Addresses of pages and of what they fetch."""

from django.urls import path

from labmon.screen import account, alarms, aside, audit, experiments, imports, lab, people, series, station, station_writes, trail

urlpatterns = [
    path("", lab.lab_page, name="lab"),
    path("lab.json", lab.lab_json, name="lab-json"),
    path("login/", account.sign_in, name="login"),
    path("logout/", account.sign_out, name="logout"),
    path("you/", account.you_page, name="you"),
    path("you/keys/", account.make_own_key, name="make-own-key"),
    path("you/keys/<int:key_id>/revoke/", account.revoke_own_key, name="revoke-own-key"),
    path("stations/<slug:station>/", station.station_page, name="station"),
    path("stations/<slug:station>/set-aside/", aside.aside_page, name="set-aside"),
    path("stations/<slug:station>/import/", imports.imports_page, name="imports"),
    path("stations/<slug:station>/import/<int:import_id>/", imports.import_page, name="import-file"),
    path("stations/<slug:station>/keys/", station_writes.make_key, name="make-key"),
    path("stations/<slug:station>/keys/<int:key_id>/revoke/", station_writes.revoke_key, name="revoke-key"),
    path("stations/<slug:station>/taps/<slug:tap>/history.json", series.history_json, name="history-json"),
    path("stations/<slug:station>/taps/<slug:tap>/trail.json", trail.trail_json, name="trail-json"),
    path("stations/<slug:station>/taps/<slug:tap>/calibration/", station_writes.calibration_page, name="calibration"),
    path("alarms/", alarms.alarms_page, name="alarms"),
    path("alarms/<int:alarm_id>/acknowledge/", alarms.acknowledge, name="acknowledge"),
    path("experiments/", experiments.experiments_page, name="experiments"),
    path("experiments/new/", experiments.new_experiment_page, name="new-experiment"),
    path("experiments/<int:experiment_id>/", experiments.experiment_page, name="experiment"),
    path("experiments/<int:experiment_id>/limits/", experiments.set_limit_page, name="set-limit"),
    path("experiments/<int:experiment_id>/limits/<int:limit_id>/retire/", experiments.retire_limit_page, name="retire-limit"),
    path("audit/", audit.audit_page, name="audit"),
    path("people/", people.people_page, name="people"),
    path("people/<int:person_id>/role/", people.set_role_page, name="set-role"),
    path("people/<int:person_id>/end/", people.end_access_page, name="end-access"),
]
