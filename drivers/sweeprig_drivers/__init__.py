"""Driver adapters and dialects that ship with sweeprig, registered by entry points like any third party's.

One small file each. They import only `roles`, `quantities` and `errors` of sweeprig: no link, no clock, no waiting.
"""
