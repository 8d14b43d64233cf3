#!/bin/bash
#PBS -N {{ job_name }}
#PBS -J 1-{{ [tasks, 2] | max }}{% if site.throttle %}%{{ site.throttle }}{% endif %}

#PBS -j oe
#PBS -o {{ logs }}/
{% if site.account %}
#PBS -A {{ site.account }}
{% endif %}
{% if site.partition %}
#PBS -q {{ site.partition }}
{% endif %}
{% if site.walltime %}
#PBS -l walltime={{ walltime_hms }}
{% endif %}
#PBS -l select={{ site.nodes }}:ncpus={{ cores_a_node }}:mpiprocs={{ tasks_a_node }}:ompthreads={{ site.threads }}{% if site.memory %}:mem={{ site.memory | lower }}{% endif %}

{% for line in site.extra %}
#PBS {{ line }}
{% endfor %}
# {{ title }}
# (PBS knows no array of one task: a task beyond the end of the list has nothing to do)
array_task=${PBS_ARRAY_INDEX:-}
submitted_from=${PBS_O_WORKDIR:-}
job_id=${PBS_JOBID:-}
{% include body %}
