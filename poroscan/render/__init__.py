"""SEM-like pictures of fields, with their true masks.

outlines: particle outlines · structures, volumes: random pore structures in two and three dimensions · radial: skins, gradients, fingers · bodies: whole invented
particles · scene: several particles in one picture · depth: what lies under the cut face · specimen: signal of the
specimen · instrument: what the microscope does to it · lettering: bar and banner · settings: the look · sem: all of it
in one call · writing: files · samples: the sample pictures.
"""

from poroscan.render.settings import LOOKS, RenderSettings, look

__all__ = ["LOOKS", "RenderSettings", "Rendered", "look", "render_section"]


def __getattr__(name: str) -> object:
    # The picture-making modules need numpy and scipy; the settings do not, and the command line asks only for those.
    if name in ("Rendered", "render_section"):
        from poroscan.render import sem

        return getattr(sem, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
