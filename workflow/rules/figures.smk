rule cards:
    input:
        units="results/sessions/{session}/encoding/shard-{shard}/units.parquet",
        scores="results/sessions/{session}/encoding/shard-{shard}/scores.parquet",
        curves="results/sessions/{session}/encoding/shard-{shard}/curves.npz",
        behaviour="results/sessions/{session}/behaviour/behaviour.parquet",
        audit="results/sessions/{session}/behaviour/audit.json",
    output:
        index="results/sessions/{session}/cards/shard-{shard}.json",
        record="results/sessions/{session}/cards/shard-{shard}.record.json",
    log:
        "logs/cards/{session}/shard-{shard}.log",
    conda:
        "../../environment.yml"
    resources:
        mem_mb=megabytes("cards"),
        runtime=minutes("cards"),
    params:
        settings=settings("cards"),
        code=PLAN.code["cards"],
        shards=shards,
        origin=origin,
    message:
        "{wildcards.session}: cards of shard {wildcards.shard}"
    shell:
        """
        python -m odograph.steps.cards --session {wildcards.session} \
            --shard {wildcards.shard} --shards {params.shards} \
            --settings {params.settings:q} --code {params.code} --origin {params.origin:q} \
            --inputs units={input.units} scores={input.scores} curves={input.curves} \
            behaviour={input.behaviour} audit={input.audit} \
            --outputs index={output.index} record={output.record} \
            --log {log}
        """


rule session_quality:
    input:
        unpack(documents_of_session),
    output:
        figures=expand(
            "results/sessions/{{session}}/session_quality.{suffix}",
            suffix=PLAN.figure_formats,
        ),
        record="results/sessions/{session}/session_quality.record.json",
    log:
        "logs/session_quality/{session}.log",
    conda:
        "../../environment.yml"
    resources:
        mem_mb=megabytes("session_quality"),
        runtime=minutes("session_quality"),
    params:
        settings=settings("session_quality"),
        code=PLAN.code["session_quality"],
    message:
        "{wildcards.session}: picture of the session's quality"
    shell:
        """
        python -m odograph.steps.session_quality --session {wildcards.session} \
            --settings {params.settings:q} --code {params.code} \
            --outputs record={output.record} \
            --log {log}
        """


rule population_figures:
    input:
        units="results/population/units.parquet",
        scores="results/population/scores.parquet",
        composition="results/population/composition.parquet",
        speed="results/population/speed.parquet",
    output:
        figures=expand(
            "results/figures/{name}.{suffix}",
            name=POPULATION_FIGURES,
            suffix=PLAN.figure_formats,
        ),
        record="results/figures/record.json",
    log:
        "logs/population_figures.log",
    conda:
        "../../environment.yml"
    resources:
        mem_mb=megabytes("population_figures"),
        runtime=minutes("population_figures"),
    params:
        settings=PLAN.settings_of("population_figures"),
        code=PLAN.code["population_figures"],
    message:
        "figures of the population"
    shell:
        """
        python -m odograph.steps.population_figures \
            --settings {params.settings:q} --code {params.code} \
            --inputs units={input.units} scores={input.scores} \
            composition={input.composition} speed={input.speed} \
            --outputs record={output.record} \
            --log {log}
        """
