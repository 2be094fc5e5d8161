"""The contract between families and the verdict logic, and the verdict logic itself.

Knows no names of charges, no files and no clock.
"""
