"""Named benchmarks: ``python -m benchmarks [--profile quick|full] [--only NAME] [--write FILE]``.

One function per problem; rivals are timed in the same run and reported as ratios.
"""
