"""Faults injected into a closed loop of real processes, judged by an oracle outside the service."""
