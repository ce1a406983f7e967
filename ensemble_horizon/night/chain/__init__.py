"""The nightly chain: choose the start, run the stages, publish, file, report.

In reading order: `looks` and `members` (which start, and waiting for its files), `fingerprint`
(what a stage rests on), `state` (what stands in the folder of a night), `work` and `attempt` (what
the stages share), `stages` and `closing` (the stages), `publishing` (one rename, and mending after
a kill), `nightly` (all of it strung together); `lock`, `owner` (whose an archive is) and `report`
stand beside them.
"""
