package network

import (
	"bytes"
	"encoding/csv"
	"fmt"
	"math"
	"math/cmplx"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"example.com/admit/service/crystal"
	"example.com/admit/service/sweep"
)

// referenceRow is one row of testdata/pi_network/examples.csv.
type referenceRow struct {
	example, inputs, output string
	want, tolerance         float64
	source, basis           string
}

func referenceRows(t *testing.T) []referenceRow {
	t.Helper()
	file, err := os.Open(filepath.Join("..", "..", "testdata", "pi_network", "examples.csv"))
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	records, err := csv.NewReader(file).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var rows []referenceRow
	for _, r := range records[1:] {
		row := referenceRow{example: r[0], inputs: r[1], output: r[2], source: r[6], basis: r[7]}
		if row.want, err = strconv.ParseFloat(r[3], 64); err != nil {
			t.Fatal(err)
		}
		bound, relative := strings.CutSuffix(r[5], " rel")
		if row.tolerance, err = strconv.ParseFloat(bound, 64); err != nil {
			t.Fatal(err)
		}
		if relative {
			row.tolerance *= math.Abs(row.want)
		}
		rows = append(rows, row)
	}
	return rows
}

// numbers reads the figures out of an input text, in their order.
func numbers(text string) []float64 {
	var all []float64
	for word := range strings.FieldsFuncSeq(text, func(r rune) bool { return r == ' ' || r == ';' || r == ',' }) {
		if v, err := strconv.ParseFloat(word, 64); err == nil {
			all = append(all, v)
		}
	}
	return all
}

// TestReferenceRows holds every published or computed row, each within its own tolerance.
func TestReferenceRows(t *testing.T) {
	circuit, _ := PiNetwork.Circuit(50, 25)
	calibration := &Calibration{Network: PiNetwork, ReferenceImpedanceOhm: 50, NominalTerminationOhm: circuit.TerminationOhm()}
	drive, err := calibration.Drive()
	if err != nil {
		t.Fatal(err)
	}
	solved, err := Solve(calibration)
	if err != nil {
		t.Fatal(err)
	}
	var terms Terms
	if err := solved.Terms(&terms, []float64{10e6}, sweep.S21); err != nil {
		t.Fatal(err)
	}
	unit := crystal.Unit{
		Modes:                 []crystal.Mode{crystal.ModeFromInductanceCapacitance(8, 14.7e-3, 0.027e-12)},
		ShuntCapacitanceFarad: 5.57e-12,
	}
	alone := unit
	alone.ShuntCapacitanceFarad = 0

	held := 0
	for _, row := range referenceRows(t) {
		if row.basis != "published" && row.basis != "computed-from-published-formula" {
			continue
		}
		t.Run(row.example+" "+row.output, func(t *testing.T) {
			if row.source == "" {
				t.Fatal("the row names no source")
			}
			var got float64
			in := numbers(row.inputs)
			kind, _, _ := strings.Cut(row.example, "-")
			switch kind + " " + row.output {
			case "pi terminating_resistance_each_side":
				got = circuit.TerminationOhm() / 2
			case "pi sum_of_terminations":
				got = circuit.TerminationOhm()
			case "pi s21_magnitude":
				got = cmplx.Abs(terms.Sample(0, complex(1e30, 0)))
			case "pi s21_db":
				got = 20 * math.Log10(circuit.ShortTransmission())
			case "pi input_impedance":
				got = real(circuit.InputImpedanceOhm(0))
			case "pi thevenin_voltage":
				got = circuit.OpenVoltagePerEMF()
				if math.Abs(drive.OpenVoltagePerEMF-got) > 1e-12 {
					t.Errorf("the drive takes %.12g V/V, circuit analysis gives %.12g", drive.OpenVoltagePerEMF, got)
				}
			case "pi s21_over_s21_short":
				z := complex(in[0], 0)
				got = real(circuit.Transmission(z) / circuit.Transmission(0))
				if bilinear := real(terms.Sample(0, 1/z)) / circuit.ShortTransmission(); math.Abs(bilinear-got) > 1e-14 {
					t.Errorf("the terms give %.15g, circuit analysis gives %.15g", bilinear, got)
				}
			case "pi s21_over_s21_short_ideal25":
				nominal, err := nominalTerms(PiNetwork, 50, PiNetwork.NominalTerminationOhm())
				if err != nil {
					t.Fatal(err)
				}
				got = real((nominal.a + nominal.b/complex(in[0], 0)) / (1 + nominal.c/complex(in[0], 0)) / (nominal.b / nominal.c))
			case "drive current_rms":
				got = drive.CurrentAtResonanceAmpere(in[0], in[1])
			case "drive crystal_power":
				got = drive.PowerAtResonanceWatt(in[0], in[1])
			case "level source_available_power_dbm":
				got = drive.SourcePowerDBm(in[0], in[1])
			case "i2r crystal_power":
				got = PowerInResistanceWatt(in[0], in[1])
			case "detuned motional_power":
				offset := numbers(strings.ReplaceAll(row.example, "-", " "))[0]
				got = drive.PowerWatt(0, unit, unit.Modes[0].ResonanceHz+offset)
			case "suppression resistance_ratio_db":
				got = ResistanceRatioDB(in[0], in[1])
			case "suppression in_25_ohm_network_db":
				got = PiNetworkTransmissionDB(in[0], in[1])
			case "suppression in_100_ohm_series_through_db":
				got = SeriesThroughTransmissionDB(in[0], in[1])
			case "phase offset_45deg_no_c0": // half the distance of the two: the curvature of X cancels
				got = (phaseOffset(t, alone, -45) - phaseOffset(t, alone, 45)) / 2
			case "phase f_plus45_minus_fs":
				got = phaseOffset(t, unit, 45)
			case "phase f_minus45_minus_fs":
				got = phaseOffset(t, unit, -45)
			case "phase l1_from_phase_offset":
				got = (8 + 25) / (2 * math.Pi * (phaseOffset(t, unit, -45) - phaseOffset(t, unit, 45)))
			default:
				t.Fatalf("no rule for this row")
			}
			if !(math.Abs(got-row.want) <= row.tolerance) {
				t.Errorf("got %.12g, want %.12g within %.3g (%s)", got, row.want, row.tolerance, row.source)
			}
			held++
		})
	}
	if held < 80 {
		t.Errorf("only %d rows were held against", held)
	}
}

// phaseOffset returns f - fs at which the transmission through an ideal 25-ohm network, the unit in its place, has the phase.
func phaseOffset(t *testing.T, unit crystal.Unit, degrees float64) float64 {
	t.Helper()
	solved, err := Solve(&Calibration{Network: PiNetwork})
	if err != nil {
		t.Fatal(err)
	}
	fs := unit.Modes[0].ResonanceHz
	var terms Terms
	phase := func(offset float64) float64 {
		if err := solved.Terms(&terms, []float64{fs + offset}, sweep.S21); err != nil {
			t.Fatal(err)
		}
		return cmplx.Phase(terms.Sample(0, unit.Admittance(fs+offset)))*180/math.Pi - degrees
	}
	low, high := -400.0, 400.0 // the phase falls from +65 to -65 degrees
	if phase(low) < 0 || phase(high) > 0 {
		t.Fatal("the phase is not between its ends")
	}
	for range 200 {
		if middle := (low + high) / 2; phase(middle) > 0 {
			low = middle
		} else {
			high = middle
		}
	}
	return (low + high) / 2
}

// TestTranscription holds the rows kept here against the tables they were taken from, where these lie beside the repository.
func TestTranscription(t *testing.T) {
	theirs, err := os.ReadFile(filepath.Join("..", "..", "..", "shared", "reference", "pi_network_examples.csv"))
	if err != nil {
		t.Skip("skipped: the reference tables do not lie beside the repository")
	}
	ours, err := os.ReadFile(filepath.Join("..", "..", "testdata", "pi_network", "examples.csv"))
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(ours, theirs) {
		t.Error("testdata/pi_network/examples.csv is not what it was transcribed from")
	}
}

func ExampleSolve() {
	solved, err := Solve(&Calibration{Network: PiNetwork})
	if err != nil {
		fmt.Println(err)
		return
	}
	var terms Terms
	if err := solved.Terms(&terms, []float64{25e6}, sweep.S21); err != nil {
		fmt.Println(err)
		return
	}
	sample := terms.Sample(0, 1/(25+0i)) // of a 25-ohm resistor
	fmt.Printf("%.4f, back to %.3f ohm\n", real(sample), real(1/terms.Admittance(0, sample)))
	fmt.Println(solved.Terms(&terms, []float64{25e6}, sweep.S11))
	// Output:
	// 0.0166, back to 25.000 ohm
	// network: a fixture network of kind pi-network gives no "s11" samples, only s21, s21-magnitude, admittance, impedance
}
