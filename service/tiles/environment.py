"""How GDAL is kept from following a file anywhere: set before rasterio is imported.

GDAL reads these names from the process environment, so that child processes inherit
them. The drivers register once per process, at the first `rasterio` environment.
"""

import os
from typing import Final

ALLOWED_DRIVERS: Final = frozenset({"GTiff", "COG", "JP2OpenJPEG", "MEM", "Memory", "PNG"})
"""What may remain. MEM and Memory open no file; rasterio builds JPEG 2000 and shapes in them."""

# GDAL can name what to skip, not what to keep, and does not list its drivers before it
# has registered them. These are the other drivers of GDAL 3.4 to 3.12; names that a build
# lacks do no harm, and a test fails when a newer build brings one that is not listed.
_SKIPPED_DRIVERS: Final = """
AAIGrid, ACE2, ADBC, ADRG, AIG, AirSAR, AIVector, AmigoCloud, ARG, Arrow, AVCBin,
AVCE00, BAG, BASISU, BIGGIF, BLX, BMP, BSB, BT, BYN, CAD, CALS, Carto, CEOS, COASP,
COSAR, CPG, CSV, CSW, CTable2, CTG, DAAS, DDS, DERIVED, DGN, DIMAP, DIPEx, DOQ1, DOQ2,
DTED, DXF, ECRGTOC, ECW, EDIGEO, EEDA, EEDAI, EHdr, EIR, ELAS, Elasticsearch, ENVI, ERS,
ESAT, ESRI Shapefile, ESRIC, ESRIJSON, EXR, FAST, FileGDB, FIT, FITS, FlatGeobuf, GDALG,
GenBin, GeoJSON, GeoJSONSeq, GeoRaster, GeoRSS, GFF, GIF, GML, GMLAS, GNMDatabase,
GNMFile, GPKG, GPSBabel, GPX, GRASSASCIIGrid, GRIB, GS7BG, GSAG, GSBG, GSC, GTA, GTI,
GTX, GXF, HANA, HDF4, HDF4Image, HDF5, HDF5Image, HEIF, HF2, HFA, HTTP, IDB, Idrisi,
ILWIS, Interlis 1, Interlis 2, IRIS, ISCE, ISG, ISIS2, ISIS3, JAXAPALSAR, JDEM, JML,
JP2ECW, JP2KAK, JP2Lura, JP2MrSID, JPEG, JPEG2000, JPEGXL, JPIPKAK, KEA, KML,
KMLSUPEROVERLAY, KRO, KTX2, L1B, LAN, LCP, Leveller, LIBERTIFF, LIBKML, LOSLAS, LVBAG,
MAP, MapML, MBTiles, MFF, MFF2, MG4Lidar, MiraMonVector, MongoDBv3, MRF, MrSID, MSG,
MSGN, MSSQLSpatial, MVT, MySQL, NDF, netCDF, NGSGEOID, NGW, NITF, NOAA_B, NSIDCbin,
NTv2, NUMPY, NWT_GRC, NWT_GRD, OAPIF, OCI, ODBC, ODS, OGCAPI, OGR_GMT, OGR_PDS, OGR_VRT,
OpenFileGDB, OSM, OZI, Parquet, PAux, PCIDSK, PCRaster, PDF, PDS, PDS4, PGDUMP, PGeo,
PLMOSAIC, PLSCENES, PMTiles, PNM, PostGISRaster, PostgreSQL, PRF, R, Rasterlite,
RASTERLITE2, RCM, RDB, RIK, RMF, ROI_PAC, RPFTOC, RRASTER, RS2, RST, S102, S104, S111,
S57, SAFE, SAGA, SAR_CEOS, SDTS, Selafin, SENTINEL2, SGI, SIGDEM, SNAP_TIFF, SNODAS,
SOSI, SQLite, SRP, SRTMHGT, STACIT, STACTA, SXF, Terragen, TGA, Tiger, TIL, TileDB,
TopoJSON, TSX, UK .NTF, USGSDEM, VDV, VFK, VICAR, VRT, WAsP, WCS, WEBP, WFS, WMS, WMTS,
XLS, XLSX, XODR, XPM, XYZ, Zarr, ZMap
"""

GUARDS: Final = {
    "GDAL_SKIP": ",".join(name.strip() for name in _SKIPPED_DRIVERS.replace("\n", " ").split(",")),
    # No driver comes in as a plugin.
    "GDAL_DRIVER_PATH": "disable",
    # Neighbouring files (.aux.xml, .ovr, .msk, .tfw) are not looked for, read or written.
    "GDAL_DISABLE_READDIR_ON_OPEN": "EMPTY_DIR",
    "GDAL_PAM_ENABLED": "NO",
    "GDAL_GEOREF_SOURCES": "INTERNAL",
    # Megabytes. A read spans few blocks at a time, see `reading`.
    "GDAL_CACHEMAX": "64",
    # No requests: no URL is ever passed on, and should one be, it matches no allowed name.
    "CPL_VSIL_CURL_ALLOWED_EXTENSIONS": ".none",
    "CPL_VSIL_CURL_USE_HEAD": "NO",
    "GDAL_HTTP_TIMEOUT": "1",
    "GDAL_HTTP_CONNECTTIMEOUT": "1",
    "GDAL_HTTP_MAX_RETRY": "0",
    "PROJ_NETWORK": "OFF",
    "GDAL_VRT_ENABLE_PYTHON": "NO",
    "GDAL_VRT_ENABLE_RAWRASTERBAND": "NO",
}


def guard() -> None:
    """Set the guards for this process and its children, whatever was set before."""
    os.environ.update(GUARDS)
