"""Every quantity of a section, as pure functions of arrays and spacing."""
