package spectral

// The steps of the transform. Step k of radix 4 takes s transforms of size m
// that lie interleaved (value p of transform q at p·s+q) to 4·s transforms of
// size m/4: for p = 0..m/4-1, with w = e^{-j2πp/m},
//
//	y[4p]   = a + b + c + d            a = x[p],        c = x[p + 2·m/4]
//	y[4p+1] = (a - jb - c + jd)·w      b = x[p + m/4],  d = x[p + 3·m/4]
//	y[4p+2] = (a - b + c - d)·w²
//	y[4p+3] = (a + jb - c - jd)·w³
//
// The inner loops run over slices of the same known length or over arrays, so
// that they need no bounds checks.

// step4 is a step with s a multiple of 16. It runs in runs of 16, whose arrays
// of known length need no bounds checks.
func step4[T Float](yr, yi, xr, xi []T, tw [][6]T, s int) {
	m := len(tw) * s
	ar, br, cr, dr := xr[:m], xr[m:][:m], xr[2*m:][:m], xr[3*m:][:m]
	ai, bi, ci, di := xi[:m], xi[m:][:m], xi[2*m:][:m], xi[3*m:][:m]
	for p := range tw {
		w := &tw[p]
		w1r, w1i, w2r, w2i, w3r, w3i := w[0], w[1], w[2], w[3], w[4], w[5]
		for k := 0; k < s; k += 16 {
			o := s*p + k
			a, e := (*[16]T)(ar[o:]), (*[16]T)(ai[o:])
			b, f := (*[16]T)(br[o:]), (*[16]T)(bi[o:])
			c, g := (*[16]T)(cr[o:]), (*[16]T)(ci[o:])
			d, h := (*[16]T)(dr[o:]), (*[16]T)(di[o:])
			o = 4*s*p + k
			y0r, y0i := (*[16]T)(yr[o:]), (*[16]T)(yi[o:])
			y1r, y1i := (*[16]T)(yr[o+s:]), (*[16]T)(yi[o+s:])
			y2r, y2i := (*[16]T)(yr[o+2*s:]), (*[16]T)(yi[o+2*s:])
			y3r, y3i := (*[16]T)(yr[o+3*s:]), (*[16]T)(yi[o+3*s:])
			for q := range 16 {
				t0r, t1r := a[q]+c[q], a[q]-c[q]
				t2r, t3r := b[q]+d[q], b[q]-d[q]
				t0i, t1i := e[q]+g[q], e[q]-g[q]
				t2i, t3i := f[q]+h[q], f[q]-h[q]
				y0r[q] = t0r + t2r
				y0i[q] = t0i + t2i
				r, i := t1r+t3i, t1i-t3r
				y1r[q] = r*w1r - i*w1i
				y1i[q] = r*w1i + i*w1r
				r, i = t0r-t2r, t0i-t2i
				y2r[q] = r*w2r - i*w2i
				y2i[q] = r*w2i + i*w2r
				r, i = t1r-t3i, t1i+t3r
				y3r[q] = r*w3r - i*w3i
				y3i[q] = r*w3i + i*w3r
			}
		}
	}
}

// second4 is the step with s = 4.
func second4[T Float](yr, yi, xr, xi []T, tw [][6]T) {
	m := len(tw) * 4
	ar, br, cr, dr := xr[:m], xr[m:][:m], xr[2*m:][:m], xr[3*m:][:m]
	ai, bi, ci, di := xi[:m], xi[m:][:m], xi[2*m:][:m], xi[3*m:][:m]
	for p := range tw {
		w := &tw[p]
		w1r, w1i, w2r, w2i, w3r, w3i := w[0], w[1], w[2], w[3], w[4], w[5]
		a, e := (*[4]T)(ar[4*p:]), (*[4]T)(ai[4*p:])
		b, f := (*[4]T)(br[4*p:]), (*[4]T)(bi[4*p:])
		c, g := (*[4]T)(cr[4*p:]), (*[4]T)(ci[4*p:])
		d, h := (*[4]T)(dr[4*p:]), (*[4]T)(di[4*p:])
		re, im := (*[16]T)(yr[16*p:]), (*[16]T)(yi[16*p:])
		for q := range 4 {
			t0r, t1r := a[q]+c[q], a[q]-c[q]
			t2r, t3r := b[q]+d[q], b[q]-d[q]
			t0i, t1i := e[q]+g[q], e[q]-g[q]
			t2i, t3i := f[q]+h[q], f[q]-h[q]
			re[q] = t0r + t2r
			im[q] = t0i + t2i
			r, i := t1r+t3i, t1i-t3r
			re[q+4] = r*w1r - i*w1i
			im[q+4] = r*w1i + i*w1r
			r, i = t0r-t2r, t0i-t2i
			re[q+8] = r*w2r - i*w2i
			im[q+8] = r*w2i + i*w2r
			r, i = t1r-t3i, t1i+t3r
			re[q+12] = r*w3r - i*w3i
			im[q+12] = r*w3i + i*w3r
		}
	}
}

// first4 is the first step, s = 1.
func first4[T Float](yr, yi, xr, xi []T, tw [][6]T) {
	n := len(tw)
	ar, ai := xr[:n], xi[:n]
	br, bi := xr[n:][:n], xi[n:][:n]
	cr, ci := xr[2*n:][:n], xi[2*n:][:n]
	dr, di := xr[3*n:][:n], xi[3*n:][:n]
	for p := range tw {
		w := &tw[p]
		re, im := (*[4]T)(yr[4*p:]), (*[4]T)(yi[4*p:])
		t0r, t1r := ar[p]+cr[p], ar[p]-cr[p]
		t2r, t3r := br[p]+dr[p], br[p]-dr[p]
		t0i, t1i := ai[p]+ci[p], ai[p]-ci[p]
		t2i, t3i := bi[p]+di[p], bi[p]-di[p]
		re[0] = t0r + t2r
		im[0] = t0i + t2i
		r, i := t1r+t3i, t1i-t3r
		re[1] = r*w[0] - i*w[1]
		im[1] = r*w[1] + i*w[0]
		r, i = t0r-t2r, t0i-t2i
		re[2] = r*w[2] - i*w[3]
		im[2] = r*w[3] + i*w[2]
		r, i = t1r-t3i, t1i+t3r
		re[3] = r*w[4] - i*w[5]
		im[3] = r*w[5] + i*w[4]
	}
}

// firstReal4 is first4 for values whose real and imaginary parts alternate.
func firstReal4[T Float](yr, yi, x []T, tw [][6]T) {
	n := len(tw)
	xa, xb, xc, xd := x[:2*n], x[2*n:][:2*n], x[4*n:][:2*n], x[6*n:][:2*n]
	for p := range tw {
		w := &tw[p]
		re, im := (*[4]T)(yr[4*p:]), (*[4]T)(yi[4*p:])
		a, b, c, d := (*[2]T)(xa[2*p:]), (*[2]T)(xb[2*p:]), (*[2]T)(xc[2*p:]), (*[2]T)(xd[2*p:])
		t0r, t1r := a[0]+c[0], a[0]-c[0]
		t2r, t3r := b[0]+d[0], b[0]-d[0]
		t0i, t1i := a[1]+c[1], a[1]-c[1]
		t2i, t3i := b[1]+d[1], b[1]-d[1]
		re[0] = t0r + t2r
		im[0] = t0i + t2i
		r, i := t1r+t3i, t1i-t3r
		re[1] = r*w[0] - i*w[1]
		im[1] = r*w[1] + i*w[0]
		r, i = t0r-t2r, t0i-t2i
		re[2] = r*w[2] - i*w[3]
		im[2] = r*w[3] + i*w[2]
		r, i = t1r-t3i, t1i+t3r
		re[3] = r*w[4] - i*w[5]
		im[3] = r*w[5] + i*w[4]
	}
}

// last4 is the last step of radix 4 where nothing is left after it: all
// twiddles are 1.
func last4[T Float](yr, yi, xr, xi []T) {
	s := len(yr) / 4
	ar, ai := xr[:s], xi[:s]
	br, bi := xr[s:][:s], xi[s:][:s]
	cr, ci := xr[2*s:][:s], xi[2*s:][:s]
	dr, di := xr[3*s:][:s], xi[3*s:][:s]
	y0r, y0i := yr[:s], yi[:s]
	y1r, y1i := yr[s:][:s], yi[s:][:s]
	y2r, y2i := yr[2*s:][:s], yi[2*s:][:s]
	y3r, y3i := yr[3*s:][:s], yi[3*s:][:s]
	for q := 0; q < s; q++ {
		t0r, t1r := ar[q]+cr[q], ar[q]-cr[q]
		t2r, t3r := br[q]+dr[q], br[q]-dr[q]
		t0i, t1i := ai[q]+ci[q], ai[q]-ci[q]
		t2i, t3i := bi[q]+di[q], bi[q]-di[q]
		y0r[q], y0i[q] = t0r+t2r, t0i+t2i
		y1r[q], y1i[q] = t1r+t3i, t1i-t3r
		y2r[q], y2i[q] = t0r-t2r, t0i-t2i
		y3r[q], y3i[q] = t1r-t3i, t1i+t3r
	}
}

// last2 is the step of radix 2 at the end of sizes that are not a power of 4.
// One step of radix 8 for it and the step before gains nothing: its sixteen
// values do not fit into the registers.
func last2[T Float](yr, yi, xr, xi []T) {
	s := len(yr) / 2
	ar, ai := xr[:s], xi[:s]
	br, bi := xr[s:][:s], xi[s:][:s]
	y0r, y0i := yr[:s], yi[:s]
	y1r, y1i := yr[s:][:s], yi[s:][:s]
	for q := 0; q < s; q++ {
		y0r[q], y1r[q] = ar[q]+br[q], ar[q]-br[q]
		y0i[q], y1i[q] = ai[q]+bi[q], ai[q]-bi[q]
	}
}
