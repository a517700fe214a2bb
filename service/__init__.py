"""The Nearhand service: lanes, envelope, store, learning, measuring, and the processes that run them."""
