"""From a folder of pictures to a run folder."""
