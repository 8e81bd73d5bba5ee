#!/bin/bash
# Slurm: each task of the array measures one part of a study; gather joins the parts when all tasks have ended.
#
#   job=$(sbatch --parsable --array=1-8 configs/slurm-array.sh study.toml results)
#   sbatch --dependency=afterany:$job --wrap "vasohm gather results"
#
# Some parts of eight again:  PARTS=8 sbatch --array=2,5 configs/slurm-array.sh study.toml results
# An array that ran out of time: submit it again as it was; it goes on where it stopped.

#SBATCH --job-name=vasohm
#SBATCH --cpus-per-task=2         # processes of a task: vasohm takes their number from here
#SBATCH --mem-per-cpu=2G          # see "Memory and time" in configs/clusters.md
#SBATCH --time=04:00:00
#SBATCH --signal=B:TERM@120       # two minutes before the end: images at work finish, no other begins
#SBATCH --requeue                 # after the loss of a node: the same task again does the rest
#SBATCH --open-mode=append
#SBATCH --output=vasohm-%A_%a.log

part=auto
if [ -n "$PARTS" ]; then part=$SLURM_ARRAY_TASK_ID/$PARTS; fi

# exec: Slurm signals this script's own process, which must be vasohm itself.
exec vasohm measure "$1" --out "$2" --part "$part"
