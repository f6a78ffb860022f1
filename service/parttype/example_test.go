package parttype_test

import (
	"errors"
	"fmt"

	"example.com/admit/service/parttype"
	"example.com/admit/service/parttype/document"
)

// A limits file with two mistakes: both are told at once, each with its line and key.
func ExampleParse() {
	_, err := parttype.Parse("TM-50M000-T3.yaml", []byte(`part_type: TM-50M000-T3
version: 1
vibration_mode: thickness-shear
overtone: 3
nominal_frequency: 50 MHz
circuit_condition: series-resonance
drive_level: 100 uW
maximum_drive_level: 500 uW
limits:
  motional_resistance: {max: 60}
  motional_capacitance: {min: 1.5 fF, max: 0.8 fF}
`))
	var faults document.Faults
	if errors.As(err, &faults) {
		fmt.Println(len(faults), "faults")
	}
	fmt.Println(err)
	// Output:
	// 2 faults
	// TM-50M000-T3.yaml:10: limits.motional_resistance.max: want a resistance such as 40 ohm (a number, one of the prefixes f p n u m k M G or none, ohm), got 60
	// TM-50M000-T3.yaml:11: limits.motional_capacitance.max: want more than the min, 1.5 fF, got "0.8 fF"
}
