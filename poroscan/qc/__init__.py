"""Is the batch good? Limits, statistics, trend and comparison of batches.

settings       limits and what is done with them
estimate       from rows of particles to the mean of a batch
interval       intervals that stay where the quantity can be
limits         verdicts of limits
regime_check   verdict of the regime wanted
assess         all limits on all batches
tolerance      tolerance intervals (ISO 16269-6)
capability     capability indices (ISO 22514-2)
acceptance     acceptance by variables (form of ISO 3951)
sample_size    how many particles, fields and points
ledger         every scan of every batch in one file
charts         control charts and runs rules
trend          the trend of one quantity
comparison     statistics of two and more batches
compare        batches against each other, quantity by quantity
"""
