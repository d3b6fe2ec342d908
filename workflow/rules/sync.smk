rule sync:
    input:
        plan="results/plan/sessions/{session}/sync.json",
    output:
        clock="results/sessions/{session}/sync/clock.json",
        residuals="results/sessions/{session}/sync/residuals.parquet",
        record="results/sessions/{session}/sync/record.json",
    log:
        "logs/sync/{session}.log",
    conda:
        "../../environment.yml"
    resources:
        mem_mb=megabytes("sync"),
        runtime=minutes("sync"),
    params:
        planned=planned("sync"),
        settings=settings("sync"),
        code=PLAN.code["sync"],
    message:
        "{wildcards.session}: the camera's clock"
    shell:
        """
        python -m odograph.steps.sync --session {wildcards.session} \
            --plan {input.plan} --planned {params.planned} \
            --settings {params.settings:q} --code {params.code} \
            --outputs clock={output.clock} residuals={output.residuals} record={output.record} \
            --log {log}
        """
