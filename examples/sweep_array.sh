#!/bin/bash
# A sweep as a plain job array: every job runs its share into an archive of its own, on any batch
# system that numbers its jobs. Nothing but the file system is shared. Submit it, and when all jobs
# have ended put the shares together; a job that was cut short goes on when it is submitted again:
#
#     sbatch examples/sweep_array.sh
#     qcosim merge sweep.h5
#
#SBATCH --job-name=corners
#SBATCH --array=1-4
#SBATCH --cpus-per-task=4
#SBATCH --mem=8G
#SBATCH --time=02:00:00
set -euo pipefail
testbench=${TESTBENCH:-examples/sweep_corners.toml}
archive=${ARCHIVE:-sweep.h5}
exec qcosim sweep "$testbench" --archive "$archive" --resume \
    --slice "$SLURM_ARRAY_TASK_ID/${SLURM_ARRAY_TASK_COUNT:-4}" \
    --workers "${SLURM_CPUS_PER_TASK:-1}"
