package gas

import (
	"errors"
	"fmt"
	"math"
)

// Reasons for which there is no humidity ratio.
var (
	ErrSaturation       = errors.New("temperature outside -100 °C to 200 °C")
	ErrRelativeHumidity = errors.New("relative humidity outside 0 to 1.05")
	ErrBoiling          = errors.New("vapour pressure reaches the total pressure")
)

// SaturationPressure gives the pressure, Pa, of water vapour over water, below
// 0 °C over ice, at t K. Formula of Hyland and Wexler, ASHRAE Transactions 89
// (1983), valid from −100 °C to 200 °C, else ErrSaturation. At the change from ice
// to water, 273.15 K, the two differ by 1e-4.
func SaturationPressure(t float64) (float64, error) {
	if !(t >= 173.15 && t <= 473.15) {
		return 0, fmt.Errorf("gas: saturation at %g K: %w", t, ErrSaturation)
	}
	if t < 273.15 {
		return math.Exp(-5674.5359/t + 6.3925247 + t*(-9.677843e-3+t*(6.2215701e-7+t*(2.0747825e-9-t*9.484024e-13))) + 4.1635019*math.Log(t)), nil
	}
	return math.Exp(-5800.2206/t + 1.3914993 + t*(-0.048640239+t*(4.1764768e-5-t*1.4452093e-8)) + 6.5459673*math.Log(t)), nil
}

// HumidityRatio gives kg water vapour per kg dry air from relative humidity rh
// (1 is saturated), temperature t K and pressure p Pa, all at the sensor:
//
//	x = rh psat(t)/p,   war = Mw/Ma · x/(1 − x)
//
// The enhancement factor of real humid air, 1.004 at sea level, is taken as 1. A
// sensor in fog may read up to 1.05, which is taken as 1.
func HumidityRatio(rh, t, p float64) (float64, error) {
	if !(rh >= 0 && rh <= 1.05) {
		return 0, fmt.Errorf("gas: relative humidity %g: %w", rh, ErrRelativeHumidity)
	}
	sat, err := SaturationPressure(t)
	if err != nil {
		return 0, err
	}
	return vapourRatio(min(rh, 1)*sat, p)
}

// HumidityRatioFromDewPoint is HumidityRatio from the dew point, K, or below
// 0 °C the frost point.
func HumidityRatioFromDewPoint(dewPoint, p float64) (float64, error) {
	sat, err := SaturationPressure(dewPoint)
	if err != nil {
		return 0, err
	}
	return vapourRatio(sat, p)
}

func vapourRatio(vapour, p float64) (float64, error) {
	if !(vapour < p) {
		return 0, fmt.Errorf("gas: vapour pressure %g Pa at %g Pa: %w", vapour, p, ErrBoiling)
	}
	return data[h2o].molarMass / airMass * vapour / (p - vapour), nil
}
