"""Reports as one HTML file each: the page's frame, its tables, its pictures.

A page loads nothing, runs no script, and can be mailed or kept beside the model it
speaks of.
"""
