"""The only room that opens a raster or keeps one.

Importing it sets the guards of `environment` first, before any of its modules imports
rasterio. Nothing else in the service may import rasterio.
"""

from service.tiles.environment import guard

guard()
