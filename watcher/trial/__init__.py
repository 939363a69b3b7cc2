"""The whole product in one command: an invented yard, run through the real cycle at simulated times."""
