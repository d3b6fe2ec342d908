rule encoding:
    input:
        plan="results/plan/sessions/{session}/shard-{shard}.json",
        behaviour="results/sessions/{session}/behaviour/behaviour.parquet",
        audit="results/sessions/{session}/behaviour/audit.json",
    output:
        units="results/sessions/{session}/encoding/shard-{shard}/units.parquet",
        scores="results/sessions/{session}/encoding/shard-{shard}/scores.parquet",
        curves="results/sessions/{session}/encoding/shard-{shard}/curves.npz",
        record="results/sessions/{session}/encoding/shard-{shard}/record.json",
    log:
        "logs/encoding/{session}/shard-{shard}.log",
    benchmark:
        "logs/encoding/{session}/shard-{shard}.benchmark.tsv"
    conda:
        "../../environment.yml"
    resources:
        mem_mb=megabytes("encoding"),
        runtime=minutes("encoding"),
    params:
        planned=planned("shard-{shard}"),
        settings=settings("encoding"),
        code=PLAN.code["encoding"],
        shards=shards,
    message:
        "{wildcards.session}: units of shard {wildcards.shard}"
    shell:
        """
        python -m odograph.steps.encoding --session {wildcards.session} \
            --shard {wildcards.shard} --shards {params.shards} \
            --plan {input.plan} --planned {params.planned} \
            --settings {params.settings:q} --code {params.code} \
            --inputs behaviour={input.behaviour} audit={input.audit} \
            --outputs units={output.units} scores={output.scores} curves={output.curves} \
            record={output.record} \
            --log {log}
        """
