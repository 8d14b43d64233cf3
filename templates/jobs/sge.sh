#!/bin/bash
#$ -N {{ job_name }}
#$ -t 1-{{ tasks }}
{% if site.throttle %}
#$ -tc {{ site.throttle }}
{% endif %}
#$ -S /bin/bash
#$ -cwd
#$ -j y
#$ -o {{ logs }}/
#$ -notify
{% if site.account %}
#$ -P {{ site.account }}
{% endif %}
{% if site.partition %}
#$ -q {{ site.partition }}
{% endif %}
{% if site.walltime %}
#$ -l h_rt={{ walltime_hms }}
{% endif %}
{% if site.memory %}
#$ -l h_vmem={{ site.memory.removesuffix("B") }}
{% endif %}
{% if site.parallel_environment %}
#$ -pe {{ site.parallel_environment }} {{ cores }}
{% endif %}
{% for line in site.extra %}
#$ {{ line }}
{% endfor %}
# {{ title }}
array_task=${SGE_TASK_ID:-}
if [ "$array_task" = undefined ]; then array_task=""; fi
submitted_from=${SGE_O_WORKDIR:-}
job_id=${JOB_ID:-}${SGE_TASK_ID:+_$SGE_TASK_ID}
{% include body %}
