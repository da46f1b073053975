"""What agencies' products say of themselves, read from their own metadata.

One module reads one kind of product and returns a `Product`: the ``scene`` part of
``POST /v1/scenes``, and the file of each part. No raster is opened here.
"""
