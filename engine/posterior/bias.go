package posterior

// Bias is what is known of an instrument's bias under one calibration: normal with
// Mean and SD >= 0, in the unit of the level. The zero value: there is none.
type Bias struct{ Mean, SD float64 }
