"""What runs again after a change, and what does not: the real workflow on small recordings."""

import os
import shutil

import pyarrow.parquet as pq

SHARDS = (0, 1)
READABLE = ("alpha", "beta", "jump")
ENDS = {"population", "population_figures", "report"}


def of_shards(rule, *sessions):
    return {f"{rule} {session} {shard}" for session in sessions for shard in SHARDS}


def fits_and_cards(*sessions):
    return of_shards("encoding", *sessions) | of_shards("cards", *sessions)


def whole_session(session):
    rules = ("intake", "sync", "behaviour", "session_quality")
    return {f"{rule} {session}" for rule in rules} | fits_and_cards(session)


def all_figures():
    quality = {f"session_quality {session}" for session in (*READABLE, "broken")}
    return of_shards("cards", *READABLE) | quality | {"population_figures", "report"}


def append(path, text):
    with path.open("a", encoding="utf-8") as file:
        file.write(text)


def test_first_run_makes_everything_of_every_session_that_can_be_read(finished):
    jobs = ENDS | {"intake broken", "session_quality broken"}
    for session in READABLE:
        jobs |= whole_session(session)
    assert finished.first.jobs == jobs
    assert all(why == "new unit" for units in finished.refitted().values() for why in units.values())


def test_nothing_runs_when_the_study_was_only_copied(study):
    outcome = study.run()
    assert outcome.jobs == set()
    assert "Nothing to be done" in outcome.text


def test_nothing_runs_when_files_were_touched_moved_or_commented(study):
    study.copy_code()
    shutil.move(study.folder / "recordings" / "sorrel_1.nwb", study.folder / "elsewhere.nwb")
    study.sessions["beta"]["nwb"] = "elsewhere.nwb"
    append(study.folder / "src/odograph/encoding/analyse.py", "\n# A comment is no code.\n")
    for file in (*study.folder.glob("src/**/*.py"), *study.folder.glob("recordings/*.nwb")):
        os.utime(file)
    assert study.run().jobs == set()


def test_a_second_sorting_refits_only_the_units_that_changed(study):
    recordings, cards = study.folder / "recordings", study.results / "sessions/alpha/cards"
    synchronised = {path: path.read_bytes() for path in study.results.glob("sessions/*/sync/*")}
    before = fit_keys(study)
    shutil.copyfile(recordings / "bracken_1_resorted.nwb", recordings / "bracken_1.nwb")
    outcome = study.run()
    now = fit_keys(study)
    # Two units became one and one became two, under new numbers; one kept its number and lost some spikes.
    gone, new = set(before) - set(now), set(now) - set(before)
    changed = {unit for unit in set(before) & set(now) if before[unit] != now[unit]}
    assert (len(gone), len(new), len(changed)) == (3, 3, 1)

    ran = {job for job in outcome.jobs if job.startswith("encoding")}
    refitted = {
        unit: why
        for unit, why in study.refitted()["alpha"].items()
        if f"encoding alpha {shard_of_unit(study, unit)}" in ran
    }
    assert refitted == dict.fromkeys(new, "new unit") | dict.fromkeys(changed, "spikes changed")
    assert "spikes changed" in outcome.text
    assert outcome.jobs - fits_and_cards("alpha") == ENDS | {"intake alpha", "session_quality alpha"}
    assert {job.replace("cards", "encoding") for job in outcome.jobs if job.startswith("cards")} == ran
    assert {path: path.read_bytes() for path in synchronised} == synchronised
    assert {path.name for path in cards.glob("unit-*")} == {f"unit-{unit}.png" for unit in now}

    # The first sorting again: its fits are still in the store.
    shutil.copyfile(recordings / "bracken_1_first.nwb", recordings / "bracken_1.nwb")
    outcome = study.run("results/population/units.parquet")
    assert fit_keys(study) == before
    again = {job for job in outcome.jobs if job.startswith("encoding")}
    assert again == ran
    assert not any(
        f"encoding alpha {shard_of_unit(study, unit)}" in again for unit in study.refitted().get("alpha", {})
    )


def fit_keys(study):
    """The key of the fit of each unit of alpha."""
    rows = pq.read_table(study.results / "population/units.parquet").to_pylist()
    return {row["unit"]: row["fit_key"] for row in rows if row["session"] == "alpha"}


def shard_of_unit(study, unit):
    for shard in SHARDS:
        table = pq.read_table(study.results / f"sessions/alpha/encoding/shard-{shard}/units.parquet")
        if unit in table.column("unit").to_pylist():
            return shard
    raise AssertionError(f"unit {unit} is in no shard")


def test_a_plotting_setting_makes_the_figures_only(study):
    study.settings["figures"]["path_points"] = 700
    assert study.would_run() == all_figures()


def test_a_line_of_the_figures_code_makes_the_figures_only(study):
    study.copy_code()
    append(study.folder / "src/odograph/figures/style.py", "\nADDED_LINE = 1\n")
    assert study.would_run() == all_figures()


def test_an_encoding_setting_makes_the_fits_and_what_follows(study):
    study.settings["encoding"] = {"folds": 5}
    assert study.would_run() == fits_and_cards(*READABLE) | ENDS
    assert reasons_of_one_shard(study) == {("fitted", "settings changed")}


def test_a_line_of_the_encoding_code_makes_the_fits_and_what_follows(study):
    study.copy_code()
    append(study.folder / "src/odograph/encoding/analyse.py", "\nADDED_LINE = 1\n")
    assert study.would_run() == fits_and_cards(*READABLE) | ENDS
    assert reasons_of_one_shard(study) == {("fitted", "code changed")}


def reasons_of_one_shard(study):
    """What became of the units of the first shard of alpha when it was run, and why."""
    outcome = study.run("results/sessions/alpha/encoding/shard-0/units.parquet")
    assert outcome.jobs == {"encoding alpha 0"}
    units = study.record("sessions/alpha/encoding/shard-0/record.json")["run"]["units"]
    return {(unit["made"], unit["why"]) for unit in units}


def test_a_session_s_own_setting_makes_that_session_and_the_population(study):
    study.sessions["alpha"]["behaviour.max_gap_s"] = 0.1
    outcome = study.run()
    assert outcome.jobs == {"behaviour alpha", "session_quality alpha"} | fits_and_cards("alpha") | ENDS
    assert set(study.refitted()["alpha"].values()) == {"behaviour changed"}
    assert study.record("sessions/alpha/behaviour/record.json")["settings"]["behaviour"]["max_gap_s"] == 0.1


def test_a_session_added_makes_it_and_the_population_and_one_removed_the_population(study):
    study.sessions["gamma"] = {"nwb": "recordings/teasel_1.nwb", "animal": "renamed"}
    assert study.run().jobs == whole_session("gamma") | ENDS
    sessions = pq.read_table(study.results / "population/sessions.parquet").to_pylist()
    assert {row["session"]: row["animal"] for row in sessions}["gamma"] == "renamed"
    del study.sessions["gamma"]
    assert study.would_run() == ENDS


def test_a_changed_fit_in_the_store_is_noticed_and_made_again(study):
    record = study.record("sessions/beta/encoding/shard-0/record.json")
    unit = record["run"]["units"][0]["unit"]
    before = study.tables()
    table = pq.read_table(study.results / "sessions/beta/encoding/shard-0/units.parquet").to_pylist()
    key = next(row["fit_key"] for row in table if row["unit"] == unit)
    entry = study.results / "store" / key[:2] / f"{key}.npz"
    data = bytearray(entry.read_bytes())
    data[len(data) // 2] ^= 1
    entry.write_bytes(data)
    shutil.rmtree(study.results / "sessions/beta/encoding/shard-0")
    outcome = study.run("results/sessions/beta/encoding/shard-0/units.parquet")
    assert outcome.jobs == {"encoding beta 0"}
    assert "damaged" in outcome.text
    made = study.record("sessions/beta/encoding/shard-0/record.json")["run"]["units"]
    assert [row["unit"] for row in made if row["made"] == "fitted"] == [unit]
    assert pq.read_table(study.results / "sessions/beta/encoding/shard-0/units.parquet").to_pylist() == table
    assert study.tables() == before


def test_another_name_of_the_animal_draws_its_cards_and_counts_again(study):
    """No fit depends on it, nor the cards of other sessions."""
    study.sessions["alpha"]["animal"] = "renamed"
    assert study.would_run() == of_shards("cards", "alpha") | ENDS
