"""The measuring bench: how many seeded faults the checks find in synthetic markets, and how many alarms are false."""
