"""A page for a committee: one file of HTML that opens from disk, asks nothing of a network and prints.

A result becomes blocks (facts, tables, pictures, notes), and one template sets blocks, whatever they are about.
"""
