"""The wire: messages, their encoding, and the sockets that carry them."""
