"""The client: rig-side link, demonstration streaming, operator requests, command line. No torch."""
