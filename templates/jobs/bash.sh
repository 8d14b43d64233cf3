#!/bin/bash
# {{ title }}
array_task=""
submitted_from=""
job_id=""
{% include body %}
