#!/bin/bash
# Grid Engine: each task of the array measures one part of a study; gather joins the parts when all have ended.
#
#   job=$(qsub -terse -t 1-8 configs/sge-array.sh study.toml results | cut -d. -f1)
#   echo "vasohm gather results" | qsub -cwd -hold_jid $job
#
# Some parts of eight again:  qsub -t 5 -v PARTS=8 configs/sge-array.sh study.toml results
# A task that ran out of time: submit the same again; it goes on where it stopped.

#$ -N vasohm
#$ -cwd
#$ -S /bin/bash
#$ -pe smp 2
#$ -l h_vmem=4G,s_rt=03:58:00,h_rt=04:00:00
#$ -r y
#$ -j y

part=auto
if [ -n "$PARTS" ]; then part=$SGE_TASK_ID/$PARTS; fi

# Grid Engine announces the end by SIGUSR1 (s_rt) or SIGUSR2 (-notify); vasohm is asked to end in order by SIGTERM.
vasohm measure "$1" --out "$2" --part "$part" --workers "${NSLOTS:-1}" &
trap 'kill -TERM $!' USR1 USR2 TERM
wait $!
status=$?
while kill -0 $! 2> /dev/null; do
    wait $!
    status=$?
done
exit $status
