"""From drawn units to reference labels: what interpreters get, and what comes back."""
