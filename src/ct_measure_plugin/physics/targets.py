"""Edges, rods and wires found on one slice, and the boxes that would measure an MTF well.

A slice of a phantom shows straight edges, circular edges of rods and small
bright spots of wires or beads. This module finds them, proposes for each a
region in mm in which its MTF can be measured, and says of the others why
they would not do.
"""
