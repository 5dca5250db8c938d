package crystal

// AirIndex is the refractive index of dry air at 15 Cel and 101325 Pa (P. E. Ciddor, Applied
// Optics 35, 1566 (1996)). Everything else here takes vacuum wavelengths: a wavelength read in
// air is longer by this factor in vacuum.
func AirIndex(nm float64) float64 {
	s := 1e6 / (nm * nm)
	return 1 + 0.05792105/(238.0185-s) + 0.00167917/(57.362-s)
}
