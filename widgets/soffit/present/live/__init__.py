"""Parts of the bqplot drawing; :mod:`soffit.present.draw_bqplot` is the way in."""
