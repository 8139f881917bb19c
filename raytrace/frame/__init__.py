"""The frame: a scene rendered to a picture, with what made it."""


def render(scene, **options):
    """Render a scene to a frame; see `raytrace.frame.rendering.render`."""
    from raytrace.frame.rendering import render as run

    return run(scene, **options)
