rule intake:
    input:
        plan="results/plan/sessions/{session}/intake.json",
    output:
        inventory="results/sessions/{session}/intake/inventory.json",
        record="results/sessions/{session}/intake/record.json",
    log:
        "logs/intake/{session}.log",
    conda:
        "../../environment.yml"
    resources:
        mem_mb=megabytes("intake"),
        runtime=minutes("intake"),
    params:
        planned=planned("intake"),
        settings=settings("intake"),
        code=PLAN.code["intake"],
    message:
        "{wildcards.session}: what the recording holds"
    shell:
        """
        python -m odograph.steps.intake --session {wildcards.session} \
            --plan {input.plan} --planned {params.planned} \
            --settings {params.settings:q} --code {params.code} \
            --outputs inventory={output.inventory} record={output.record} \
            --log {log}
        """
