from snakemake.utils import min_version

min_version("9.19")


configfile: "config/config.yaml"


include: "workflow/rules/common.smk"


rule all:
    default_target: True
    input:
        "results/report.html",
        "results/root.json",
        all_cards,
        all_session_figures,
        # A job in the middle that failed has lost its products, while those made from them before still stand: the
        # engine would call that up to date. Every job's record is asked for, so that the next run goes on there.
        all_records,
    message:
        "everything is up to date"


include: "workflow/rules/intake.smk"
include: "workflow/rules/sync.smk"
include: "workflow/rules/behaviour.smk"
include: "workflow/rules/encoding.smk"
include: "workflow/rules/population.smk"
include: "workflow/rules/figures.smk"
include: "workflow/rules/report.smk"
include: "workflow/rules/root.smk"
