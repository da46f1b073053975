"""The invented land of Quillmere Growers: surfaces, parcels, growth, weather, events, images.

Nothing here comes from the service: what it measures can be held against what was put in.
"""
