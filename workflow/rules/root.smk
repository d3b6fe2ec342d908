rule root:
    input:
        all_records,
    output:
        "results/root.json",
    log:
        "logs/root.log",
    conda:
        "../../environment.yml"
    resources:
        mem_mb=megabytes("root"),
        runtime=minutes("root"),
    params:
        code=PLAN.code["root"],
    message:
        "the run root"
    shell:
        "python -m odograph.steps.root --code {params.code} --log {log}"
