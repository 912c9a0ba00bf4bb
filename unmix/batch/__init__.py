"""Batches: many scenes, many variants, run and graded; killed and resumed, here or on a cluster."""
