"""From an outcome of core to numbers and sentences in the user's charges.  Floor: diagnose; calls core, never solve."""
