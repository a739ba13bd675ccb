"""When it runs: the command line, the nightly flow, and how the markets of a night are shared among workers.

Belongs here: everything that knows of clocks, terminals, workers, signals and Prefect. Does not belong here:
what a price is (`contracts/`), what is declared and published (`catalog/`).

    settings.py   which desk, raw folder and store a command works on
    exits.py      the exit codes, and the two ways a command is stopped from outside
    clock.py      what time it is, handed to whatever asks
    waiting.py    waiting for files that are overdue or still being written
    outcome.py    what a night came to, once, for everybody who is told of it
    progress.py   how far a night has come, told on standard error
    work.py       one night without Prefect: lock, begin, build on a pool of workers, finish
    tasks.py      one market as one Prefect task
    watched.py    a Prefect API to report to: the configured one, or an own one for the length of the run
    messages.py   what Prefect is told of a night that ended
    nightly.py    one night as a Prefect flow
    schedule.py   keeping that flow on the desk's cron and zone
    replay.py     past nights, into a store of their own
    nights.py     the commands that run nights
    render.py     tables, JSON and text on standard output
    shell.py      what every command has in common: options, help, errors to exit codes
    commands.py   the commands
"""
