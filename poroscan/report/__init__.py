"""The report of a run: one HTML file that stands alone, and the same as PDF.

settings    what a user can choose
source      what the report reads of a run folder
numbers     values rounded to their uncertainty
words       sentences for people
regime      regimes and advice in words
look_alikes simulated particles that look like a batch
verdicts    limits and verdicts in words, and the particles against the limits
gallery     which particle is shown first
trend_view  control charts of a ledger in words, charts and tables
picture     pictures with outline and pores drawn on them
svg         line charts as compact inline SVG
qc_charts   charts of quality control
figures     the figures of batches and particles
toml_text   the recipe as a user would write it
content     what the report says, as plain values
page        the content as HTML
pdf         the content as PDF
"""
