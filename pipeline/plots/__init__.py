"""Pictures of a run for papers and slides: one plot a file, data first, axes of one's own if wanted.

`plot_*(data, ax=None)` draws into `ax`, or into a new figure, and answers the axes; `write_plots` writes them all.
"""
