rule behaviour:
    input:
        plan="results/plan/sessions/{session}/behaviour.json",
        clock="results/sessions/{session}/sync/clock.json",
    output:
        behaviour="results/sessions/{session}/behaviour/behaviour.parquet",
        audit="results/sessions/{session}/behaviour/audit.json",
        dropped="results/sessions/{session}/behaviour/dropped.parquet",
        record="results/sessions/{session}/behaviour/record.json",
    log:
        "logs/behaviour/{session}.log",
    conda:
        "../../environment.yml"
    resources:
        mem_mb=megabytes("behaviour"),
        runtime=minutes("behaviour"),
    params:
        planned=planned("behaviour"),
        settings=settings("behaviour"),
        code=PLAN.code["behaviour"],
    message:
        "{wildcards.session}: position, head direction and speed"
    shell:
        """
        python -m odograph.steps.behaviour --session {wildcards.session} \
            --plan {input.plan} --planned {params.planned} \
            --settings {params.settings:q} --code {params.code} \
            --inputs clock={input.clock} \
            --outputs behaviour={output.behaviour} audit={output.audit} dropped={output.dropped} \
            record={output.record} \
            --log {log}
        """
