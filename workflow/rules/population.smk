rule population:
    input:
        plan="results/plan/population.json",
        inventories=expand(
            "results/sessions/{session}/intake/inventory.json", session=PLAN.sessions
        ),
        clocks=of_sessions("results/sessions/{session}/sync/clock.json"),
        audits=of_sessions("results/sessions/{session}/behaviour/audit.json"),
        units=of_shards(
            "results/sessions/{session}/encoding/shard-{shard}/units.parquet"
        ),
        scores=of_shards(
            "results/sessions/{session}/encoding/shard-{shard}/scores.parquet"
        ),
    output:
        units="results/population/units.parquet",
        units_tsv="results/population/units.tsv",
        scores="results/population/scores.parquet",
        composition="results/population/composition.parquet",
        composition_tsv="results/population/composition.tsv",
        speed="results/population/speed.parquet",
        speed_tsv="results/population/speed.tsv",
        sessions="results/population/sessions.parquet",
        sessions_tsv="results/population/sessions.tsv",
        summary="results/population/summary.json",
        record="results/population/record.json",
    log:
        "logs/population.log",
    conda:
        "../../environment.yml"
    resources:
        mem_mb=megabytes("population"),
        runtime=minutes("population"),
    params:
        planned=PLAN.digests["population"],
        settings=PLAN.settings_of("population"),
        code=PLAN.code["population"],
    message:
        "all units together"
    shell:
        """
        python -m odograph.steps.population \
            --plan {input.plan} --planned {params.planned} \
            --settings {params.settings:q} --code {params.code} \
            --outputs units={output.units} units_tsv={output.units_tsv} scores={output.scores} \
            composition={output.composition} composition_tsv={output.composition_tsv} \
            speed={output.speed} speed_tsv={output.speed_tsv} \
            sessions={output.sessions} sessions_tsv={output.sessions_tsv} \
            summary={output.summary} record={output.record} \
            --log {log}
        """
