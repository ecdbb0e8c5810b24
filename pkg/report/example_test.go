package report_test

import (
	"fmt"
	"os"

	"alidade/pkg/pipeline"
	"alidade/pkg/report"
)

func ExampleSummary() {
	gain := 7.94
	r := &pipeline.Result{
		Steer:   pipeline.Steer{AzimuthDeg: 60},
		Overall: pipeline.Overall{SNRGainDB: &gain, SNRGainCI95: &[2]float64{7.2, 8.6}},
	}
	if err := report.Summary(os.Stdout, r, 80); err != nil {
		fmt.Println(err)
	}
	// Output:
	// 60.0°: SNR gain 7.9 dB (95 %: 7.2 to 8.6)
}
