#!/bin/bash
# PBS: each subjob measures one part of a study; gather joins the parts when all have ended.
#
#   job=$(qsub -J 1-8 -v STUDY=study.toml,OUT=results,PARTS=8 configs/pbs-array.sh)
#   echo "cd $PWD && vasohm gather results" | qsub -W depend=afterany:$job
#
# PBS does not tell a subjob how many there are: PARTS must be the last number of -J. Torque: -t in place of -J.
# A subjob that ran out of time: submit the same again; it goes on where it stopped.

#PBS -N vasohm
#PBS -l select=1:ncpus=2:mem=4gb
#PBS -l walltime=04:00:00
#PBS -r y
#PBS -j oe

cd "$PBS_O_WORKDIR" || exit 2
number=${PBS_ARRAY_INDEX:-$PBS_ARRAYID}

# exec: the signal before the end must reach vasohm itself; NCPUS is the number of processors that were asked for.
exec vasohm measure "$STUDY" --out "$OUT" --part "$number/$PARTS" --workers "${NCPUS:-1}"
