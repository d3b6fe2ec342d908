rule report:
    input:
        plan="results/plan/population.json",
        units="results/population/units.parquet",
        scores="results/population/scores.parquet",
        composition="results/population/composition.parquet",
        speed="results/population/speed.parquet",
        sessions="results/population/sessions.parquet",
        summary="results/population/summary.json",
        figures=expand("results/figures/{name}.png", name=POPULATION_FIGURES),
        session_figures=all_session_figures,
        curves=of_shards("results/sessions/{session}/encoding/shard-{shard}/curves.npz"),
        cards=all_cards,
    output:
        page="results/report.html",
        record="results/report.record.json",
    log:
        "logs/report.log",
    conda:
        "../../environment.yml"
    resources:
        mem_mb=megabytes("report"),
        runtime=minutes("report"),
    params:
        planned=PLAN.digests["population"],
        settings=PLAN.settings_of("report"),
        code=PLAN.code["report"],
    message:
        "the report"
    shell:
        """
        python -m odograph.steps.report \
            --plan {input.plan} --planned {params.planned} \
            --settings {params.settings:q} --code {params.code} \
            --inputs units={input.units} scores={input.scores} composition={input.composition} \
            speed={input.speed} sessions={input.sessions} summary={input.summary} \
            --outputs page={output.page} record={output.record} \
            --log {log}
        """
