"""Tests of the cluster, most of them with real processes and TLS: `python -m tests.cluster` runs them all."""
