"""The command line and the nightly flow: exit codes, help, JSON, workers, Prefect."""
