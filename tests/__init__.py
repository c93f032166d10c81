"""Tests of the tool: by stage, outside figures, properties, benchmarks."""
