"""Which cells a parcel owns and how to summarise them."""
