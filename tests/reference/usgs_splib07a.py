"""Some reflectances of the USGS Spectral Library, version 7, linear between channels, by record number.

Source: Kokaly et al. 2017, USGS Spectral Library Version 7, USGS Data Series 1035, doi:10.3133/ds1035.
"""

REFLECTANCE = {
    5561: {480: 0.0538, 640: 0.0553, 700: 0.0575, 1535: 0.0599},  # ilmenite HS231.3B
    1436: {480: 0.6187, 640: 0.6635, 700: 0.6655, 1535: 0.6295},  # anorthite HS349.3B
    5291: {480: 0.5196, 640: 0.5857, 700: 0.5924, 1535: 0.5532},  # hypersthene PYX02.a, 12 µm
    5410: {480: 0.1510, 640: 0.1937, 700: 0.1987, 1535: 0.1079},  # hypersthene PYX02.h, above 250 µm
    8238: {480: 0.1944, 640: 0.3128, 700: 0.3255, 1535: 0.2790},  # olivine KI3005, Fo11
    13518: {480: 0.8334, 640: 0.8235, 700: 0.8159, 1535: 0.0086},  # melting snow mSnw01a
    13566: {480: 0.2501, 640: 0.2483, 700: 0.2401, 1535: 0.0046},  # slush mSnw15
}
