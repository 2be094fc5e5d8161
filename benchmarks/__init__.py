"""Speed, measured: each module runs alone as `python -m benchmarks.NAME`, with `--write` into docs/benchmarks.md."""
