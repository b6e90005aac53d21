# From raw recordings to a report: what is made, and from where to where.
#
#   dataset ─ intake ─ filter ─ sensors ─ components ─ windows ─ spectra ─┬─ response ─┐
#                                                                         ├─ alpha ────┼─ study ─ report
#                                                                         └─ relation ─┘
# Every file of the results is listed in scripts/onbin/layout.py and explained in README.md.

from snakemake.utils import min_version

min_version("9.10")


include: "rules/common.smk"
include: "rules/audit.smk"
include: "rules/intake.smk"
include: "rules/cleaning.smk"
include: "rules/measures.smk"
include: "rules/study.smk"
include: "rules/report.smk"


rule all:
    default_target: True
    input:
        result("report_page"),
        result("manifest_files"),


rule cleaned:
    input:
        [result("windows_signal").format(recording=r.name) for r in RECORDINGS],


onstart:
    begin_run()


onsuccess:
    say_last(closing_summary())


onerror:
    say_last(closing_failures(log))
