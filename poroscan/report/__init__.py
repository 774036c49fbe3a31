"""The report of a run: one HTML file that stands alone.

settings    what a user can choose
source      what the report reads of a run folder
numbers     values rounded to their uncertainty
words       sentences for people
picture     pictures with outline and pores drawn on them
svg         line charts as compact inline SVG
figures     the figures of batches and particles
toml_text   the recipe as a user would write it
page        the page
"""
