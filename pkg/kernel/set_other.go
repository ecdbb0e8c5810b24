//go:build !amd64

package kernel

// There are no vector functions here: haveVector keeps them from being called.

func haveVector() bool { return false }

func none() { panic("kernel: no vector set here") }

func addFIRAVX2(y *float32, n int, x *float32, h *float32, taps int) { none() }

func addProductAVX2(sr *float32, si *float32, ar *float32, ai *float32, br *float32, bi *float32, n int) {
	none()
}

func powerOfSumsAVX2(p *float32, pStride int, x *float32, xStride int, w *float32, sources int, lines int) {
	none()
}

func powerOfPairsAVX2(p *float32, pStride int, x *float32, xStride int, w *float32, pairs int, lines int) {
	none()
}

func foldPairAVX2(y *float32, stride int, ar *float32, ai *float32, br *float32, bi *float32, kr *float32, ki *float32, lines int) {
	none()
}

func weightedSumsAVX2(dst *float32, p *float32, stride int, w *float32, lines int) { none() }

func firstStepFloat32AVX2(yr *float32, yi *float32, xr *float32, xi *float32, wide *float32, count int) {
	none()
}

func firstStepRealFloat32AVX2(yr *float32, yi *float32, x *float32, wide *float32, count int) { none() }

func secondStepFloat32AVX2(yr *float32, yi *float32, xr *float32, xi *float32, wide *float32, count int) {
	none()
}

func stepFloat32AVX2(yr *float32, yi *float32, xr *float32, xi *float32, tw *float32, count int, s int) {
	none()
}

func lastStep2Float32AVX2(yr *float32, yi *float32, xr *float32, xi *float32, s int) { none() }

func lastStep4Float32AVX2(yr *float32, yi *float32, xr *float32, xi *float32, s int) { none() }

func lastStep8Float32AVX2(yr *float32, yi *float32, xr *float32, xi *float32, s int) { none() }

func splitHalvesFloat32AVX2(re *float32, im *float32, cos *float32, sin *float32, last int, n int) {
	none()
}

func joinHalvesFloat32AVX2(zr *float32, zi *float32, re *float32, im *float32, cos *float32, sin *float32, last int, n int) {
	none()
}

func alternateFloat32AVX2(x *float32, zr *float32, zi *float32, scale float32, n int) { none() }

func firstStepFloat64AVX2(yr *float64, yi *float64, xr *float64, xi *float64, wide *float64, count int) {
	none()
}

func firstStepRealFloat64AVX2(yr *float64, yi *float64, x *float64, wide *float64, count int) { none() }

func stepFloat64AVX2(yr *float64, yi *float64, xr *float64, xi *float64, tw *float64, count int, s int) {
	none()
}

func lastStep2Float64AVX2(yr *float64, yi *float64, xr *float64, xi *float64, s int) { none() }

func lastStep4Float64AVX2(yr *float64, yi *float64, xr *float64, xi *float64, s int) { none() }

func lastStep8Float64AVX2(yr *float64, yi *float64, xr *float64, xi *float64, s int) { none() }

func splitHalvesFloat64AVX2(re *float64, im *float64, cos *float64, sin *float64, last int, n int) {
	none()
}

func joinHalvesFloat64AVX2(zr *float64, zi *float64, re *float64, im *float64, cos *float64, sin *float64, last int, n int) {
	none()
}

func alternateFloat64AVX2(x *float64, zr *float64, zi *float64, scale float64, n int) { none() }

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

func addPhasesAVX2(z *float32, stride int, vectors int, x *float32, h *float32, groups int) { none() }

func joinPhasesAVX2(y *float32, z *float32, stride int, n int) { none() }

func dotAVX2(a *float32, b *float32, n int) float32 {
	none()
	return 0
}

func peakAVX2(x *float32, n int) uint32 {
	none()
	return 0
}

func addSquaresAVX2(sum *float64, square *float64, x *float32, n int) { none() }

func powersAVX2(p *float32, re *float32, im *float32, n int) { none() }

func multiplyAVX2(y *float32, a *float32, b *float32, n int) { none() }

func quantiseAVX2(q *int32, x *float32, scale float32, low float32, high float32, n int) { none() }

func addCrossAVX2(sr *float64, si *float64, ar *float64, ai *float64, br *float64, bi *float64, keep float64, n int) {
	none()
}

func addWeightedCrossAVX2(sr *float64, si *float64, ar *float64, ai *float64, br *float64, bi *float64, w *float64, keep float64, n int) {
	none()
}
