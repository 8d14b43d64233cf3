#!/bin/bash
#BSUB -J "{{ job_name }}[1-{{ tasks }}]{% if site.throttle %}%{{ site.throttle }}{% endif %}"
#BSUB -o {{ logs }}/%J_%I.log
{% if site.account %}
#BSUB -P {{ site.account }}
{% endif %}
{% if site.partition %}
#BSUB -q {{ site.partition }}
{% endif %}
{% if site.walltime %}
#BSUB -W {{ walltime_hm }}
#BSUB -wa TERM
#BSUB -wt {{ grace_minutes }}
{% endif %}
{% if site.memory %}
#BSUB -M {{ site.memory }}
#BSUB -R "rusage[mem={{ site.memory }}]"
{% endif %}
#BSUB -n {{ cores }}
#BSUB -R "span[ptile={{ cores_a_node }}]"
{% for line in site.extra %}
#BSUB {{ line }}
{% endfor %}
# {{ title }}
array_task=${LSB_JOBINDEX:-}
if [ "$array_task" = 0 ]; then array_task=""; fi
submitted_from=${LS_SUBCWD:-}
job_id=${LSB_JOBID:-}${LSB_JOBINDEX:+_$LSB_JOBINDEX}
{% include body %}
