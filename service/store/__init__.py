"""The one database: rigs, episodes, versions, jobs, measurements, releases, events."""
