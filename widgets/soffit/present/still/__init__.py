"""Parts of the matplotlib drawing; :mod:`soffit.present.draw_mpl` is the way in."""
