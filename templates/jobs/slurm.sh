#!/bin/bash
#SBATCH --job-name={{ job_name }}
#SBATCH --array=1-{{ tasks }}{% if site.throttle %}%{{ site.throttle }}{% endif %}

#SBATCH --output={{ logs }}/%A_%a.log
#SBATCH --open-mode=append
{% if site.account %}
#SBATCH --account={{ site.account }}
{% endif %}
{% if site.partition %}
#SBATCH --partition={{ site.partition }}
{% endif %}
{% if site.qos %}
#SBATCH --qos={{ site.qos }}
{% endif %}
{% if site.walltime %}
#SBATCH --time={{ site.walltime }}
#SBATCH --signal=B:TERM@{{ site.grace }}
{% endif %}
{% if site.memory %}
#SBATCH --mem={{ site.memory.removesuffix("B") }}
{% endif %}
#SBATCH --nodes={{ site.nodes }}
#SBATCH --ntasks={{ site.tasks }}
#SBATCH --cpus-per-task={{ site.threads }}
{% for line in site.extra %}
#SBATCH {{ line }}
{% endfor %}
# {{ title }}
array_task=${SLURM_ARRAY_TASK_ID:-}
submitted_from=${SLURM_SUBMIT_DIR:-}
job_id=${SLURM_ARRAY_JOB_ID:-${SLURM_JOB_ID:-}}${SLURM_ARRAY_TASK_ID:+_$SLURM_ARRAY_TASK_ID}
{% include body %}
