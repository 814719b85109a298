// Package calib analyses reference runs: what the instrument does with no cell
// under the plate.
//
// For the spring constant from a thermal-noise record feed the deflection to a
// Spectrum, then call FitThermal and SpringConstant. Allan tells over what time
// averaging helps. Sensitivity and lag from bare glass, and drag from a blank
// run, are open issues.
package calib
