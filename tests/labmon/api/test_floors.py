"""Lab floors over the API: managers set them, everybody sees them, a limit below is refused with who may lower it."""

ER20 = {"quantity": "er_db", "value": 20.0, "reason": "all benches"}


def test_managers_set_floors_and_others_do_not(lab):
    assert lab.manager.post("/api/v1/stations/bench-a/floors", ER20).status_code == 201
    for caller in (lab.owner, lab.researcher, lab.guest):
        assert caller.post("/api/v1/stations/bench-a/floors", ER20 | {"value": 1.0}).status_code == 403
    assert lab.nobody.post("/api/v1/stations/bench-a/floors", ER20).status_code == 401
    assert [one["value"] for one in lab.researcher.get("/api/v1/floors").json()["floors"]] == [20.0]
    hidden = lab.manager.post("/api/v1/stations/bench-b/floors", ER20)
    assert hidden.status_code == 201 and len(lab.guest.get("/api/v1/floors").json()["floors"]) == 1


def test_a_limit_below_is_refused_and_says_who_may_lower_it(lab):
    lab.manager.post("/api/v1/stations/bench-a/floors", ER20 | {"tap": "in"})
    limits = f"/api/v1/experiments/{lab.experiment.pk}/limits"
    refused = lab.owner.post(limits, {"tap": "bench-a/in", "quantity": "er_db", "alarm": 17.0})
    assert refused.status_code == 400 and refused.json()["field"] == "alarm"
    assert "Only a lab manager may lower the floor" in refused.json()["detail"]
    assert lab.owner.post(limits, {"tap": "bench-a/in", "quantity": "er_db", "alarm": 21.0}).status_code == 201
    answer = lab.manager.post("/api/v1/stations/bench-a/floors", ER20 | {"value": 25.0}).json()
    assert answer["limits_beyond"] == [{"experiment": lab.experiment.pk, "tap": "bench-a/in", "alarm": 21.0}]
    assert lab.manager.post("/api/v1/stations/bench-a/floors", ER20 | {"value": None}).json()["value"] is None
