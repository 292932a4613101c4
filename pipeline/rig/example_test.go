package rig_test

import (
	"fmt"

	"unsheard/pipeline/rig"
)

// One shot of a flash: frames of both sensors and what really happened.
func ExampleStation_Shoot() {
	station, err := rig.New(rig.Default())
	if err != nil {
		fmt.Println(err)
		return
	}
	scene, err := station.Scene("flash", 1)
	if err != nil {
		fmt.Println(err)
		return
	}
	streak, reference, truth := station.Shoot(scene, 1)
	fwhm, _ := scene.Fact("fwhm")
	fmt.Printf("streak %d×%d, reference %d×%d\n", streak.W, streak.H, reference.W, reference.H)
	fmt.Printf("FWHM %.2f ps, from the light curve %.2f ps\n", fwhm, truth.Summary().FWHM)
	// Output:
	// streak 93×121, reference 100×96
	// FWHM 5.18 ps, from the light curve 5.18 ps
}
