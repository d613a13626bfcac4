"""From a scene in the world to the frames a phone would record of it.

The still scene (`scenery.py`) is traced once. Per frame only what moves (`drawing.py`) is drawn, in linear light, at many
moments of the exposure and each piece at the time of its own row; then come the lens' blur, lamp flicker, vignetting, noise
and the transfer curve. Nothing here knows how the line moves: it asks a `Motion`.

    camera = Camera(...)
    renderer = Renderer(camera, scenery, motion, style, frame_s=camera.frame_times(200), seed=1)
    write_clip(path, renderer.frames(), ticks, Fraction(1, 240), quarter_turns=camera.quarter_turns)
"""
