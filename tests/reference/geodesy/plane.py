"""East, north and up of places in the plane that touches the Earth at an origin, computed by PROJ (through pyproj).

PROJ's steps are `cart` (EPSG coordinate operation method 9602) and `topocentric` (method 9836) on the WGS 84 ellipsoid. The
first case is the worked example that IOGP Publication 373-7-2 prints for method 9837: -189 013.869, -128 642.040,
-4 220.171 m.

    pip install pyproj==3.7.2
    python3 tests/reference/geodesy/plane.py > tests/reference/geodesy/plane.csv
"""

import pyproj

EXAMPLE = ((55.0, 5.0, 200.0), (53 + 48 / 60 + 33.82 / 3600, 2 + 7 / 60 + 46.38 / 3600, 73.0))
ORIGINS = [(48.137, 11.575, 520.0), (-33.86, 151.21, 20.0), (0.0, 0.0, 0.0), (78.22, -179.9999, 5.0), (-0.5, -78.5, 2850.0)]
OFFSETS = [(1e-6, 0.0, 0.0), (0.001, -0.002, 3.5), (-0.01, 0.02, -12.0), (0.1, 0.05, 100.0)]


def cases():
    yield EXAMPLE
    for lat, lon, alt in ORIGINS:
        for dlat, dlon, dalt in OFFSETS:
            east = lon + dlon
            if east < -180.0:
                east += 360.0
            yield (lat, lon, alt), (lat + dlat, east, alt + dalt)


def main():
    print(f"# PROJ {pyproj.proj_version_str}, pyproj {pyproj.__version__}; written by plane.py")
    print("latitude_deg,longitude_deg,altitude_m,place_latitude_deg,place_longitude_deg,place_altitude_m,east_m,north_m,up_m")
    for origin, place in cases():
        lat, lon, alt = origin
        steps = pyproj.Transformer.from_pipeline(
            "+proj=pipeline +step +proj=unitconvert +xy_in=deg +xy_out=rad +step +proj=cart +ellps=WGS84 "
            f"+step +proj=topocentric +ellps=WGS84 +lat_0={lat!r} +lon_0={lon!r} +h_0={alt!r}"
        )
        plane = steps.transform(place[1], place[0], place[2])
        print(",".join(repr(float(value)) for value in (*origin, *place, *plane)))


main()
