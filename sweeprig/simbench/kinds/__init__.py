"""Kinds of motor beside the brushed one of `plant`: each is a `bench.Machine`, so instruments see them all alike.

`choose` picks by the motor file; nothing is imported before it is wanted.
"""
