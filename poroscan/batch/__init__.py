"""From a folder to a run: many pictures, several processes, one folder of results.

recipe     settings of a run, from TOML
names      safe names for folders, cells and lines
image      one picture: read, segmented, measured, drawn
store      what a run folder holds and how it is written
workers    processes, and what happens when one dies
tables     columns of the tables, and how they are put together
summary    one row per batch
collate    the tables of a run, put together
limits_table  one row per batch and limit
dictionary every column of every table in words
summary_json  the run for other programs
ledger_entry  a run on its way into the ledger
reporting  HTML and PDF of a run
scan       the whole run
"""
