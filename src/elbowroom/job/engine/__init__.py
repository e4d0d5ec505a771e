"""Many units of work over processes of one machine or of a cluster, into stores that resume.

- `items`: one station at one or more frequencies, as it is sent to whoever solves it, and what comes back
- `split`: how many workers with how many threads each
- `runner`: items over workers; what failed, what is tried again, what other runs work on
- `local`: workers in this process or in processes of this machine
- `cluster`: workers of Dask distributed
- `campaign`: jobs to items and back
"""
