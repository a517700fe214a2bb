"""The one SQLite file: rigs, episodes, versions, jobs, measurements, releases and the event record."""
