"""The forms the database has had, one file per step in `versions`; run by `skylag.archive.forms` and nobody else."""
