"""Thermodynamics of demixing and the phase-field simulation of a particle."""
