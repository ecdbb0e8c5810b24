//go:build !amd64

package kernel

// There are no vector functions here: haveVector keeps them from being called.

func haveVector() bool { return false }

func none() { panic("kernel: no vector set here") }

func addFIRAVX2(y *float32, n int, x *float32, h *float32, taps int) { none() }

func addProductAVX2(sr *float32, si *float32, ar *float32, ai *float32, br *float32, bi *float32, n int) {
	none()
}

func firstStepAVX2(yr *float32, yi *float32, xr *float32, xi *float32, wide *float32, count int) {
	none()
}

func firstStepRealAVX2(yr *float32, yi *float32, x *float32, wide *float32, count int) { none() }

func secondStepAVX2(yr *float32, yi *float32, xr *float32, xi *float32, tw *float32, count int) {
	none()
}

func stepAVX2(yr *float32, yi *float32, xr *float32, xi *float32, tw *float32, count int, s int) {
	none()
}

func lastStep2AVX2(yr *float32, yi *float32, xr *float32, xi *float32, s int) { none() }

func lastStep4AVX2(yr *float32, yi *float32, xr *float32, xi *float32, s int) { none() }

func lastStep8AVX2(yr *float32, yi *float32, xr *float32, xi *float32, s int) { none() }

func splitHalvesAVX2(re *float32, im *float32, cos *float32, sin *float32, last int, n int) { none() }

func joinHalvesAVX2(zr *float32, zi *float32, re *float32, im *float32, cos *float32, sin *float32, last int, n int) {
	none()
}

func alternateAVX2(x *float32, zr *float32, zi *float32, scale float32, n int) { none() }

func eightFrom16AVX2(dst **float32, src *byte, frame int, n int) { none() }

func fourFrom16AVX2(dst **float32, src *byte, frame int, n int) { none() }

func eightFrom24AVX2(dst **float32, src *byte, frame int, n int) { none() }

func fourFrom24AVX2(dst **float32, src *byte, frame int, n int) { none() }

func eightFrom32AVX2(dst **float32, src *byte, frame int, n int) { none() }

func fourFrom32AVX2(dst **float32, src *byte, frame int, n int) { none() }

func eightFromFloat32AVX2(dst **float32, src *byte, frame int, n int) uint32 {
	none()
	return 0
}

func fourFromFloat32AVX2(dst **float32, src *byte, frame int, n int) uint32 {
	none()
	return 0
}
