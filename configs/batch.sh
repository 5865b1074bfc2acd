#!/bin/sh
# Array job for a batch scheduler: reprocess a survey on several machines that
# share its folder. Written for Slurm (sbatch configs/batch.sh); for another
# scheduler change the lines with #SBATCH and the two variables below.
#SBATCH --job-name=nightsift
#SBATCH --array=1-8
#SBATCH --cpus-per-task=4
#SBATCH --mem=8G
#SBATCH --time=12:00:00
#SBATCH --requeue

survey=${NIGHTSIFT_SURVEY:-/data/my-survey}
shard=${SLURM_ARRAY_TASK_ID:?start this script as an array job}
shards=${SLURM_ARRAY_TASK_COUNT:?start this script as an array job}

# Each task takes its share of the frames. All tasks must see the same number
# of shards. A task that was killed may be started again: it goes on.
# The catalogue (folders.store in survey.toml) needs a file system with working
# locks; if the shared one has none, run without --shard on one machine.
nightsift run --survey "$survey" --shard "$shard/$shards" --jobs "${SLURM_CPUS_PER_TASK:-1}" --memory-gib 7 --log json
code=$?

# Frames that were set aside (3) are no failure of the job.
[ "$code" -eq 3 ] && code=0
exit "$code"
