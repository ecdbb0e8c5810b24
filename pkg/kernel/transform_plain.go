package kernel

import "math"

// The plain steps, which are the definition.

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

// last8 goes over the values twice, for the even bins of the eight and for the
// odd ones: sixteen values at once do not fit into the registers.
func last8[T Float](yr, yi, xr, xi []T) {
	s := len(yr) / 8
	column := func(x []T, k int) []T { return x[k*s:][:s] }
	r0, r1, r2, r3 := column(xr, 0), column(xr, 1), column(xr, 2), column(xr, 3)
	r4, r5, r6, r7 := column(xr, 4), column(xr, 5), column(xr, 6), column(xr, 7)
	i0, i1, i2, i3 := column(xi, 0), column(xi, 1), column(xi, 2), column(xi, 3)
	i4, i5, i6, i7 := column(xi, 4), column(xi, 5), column(xi, 6), column(xi, 7)
	a, b, c, d := column(yr, 0), column(yr, 2), column(yr, 4), column(yr, 6)
	e, f, g, h := column(yi, 0), column(yi, 2), column(yi, 4), column(yi, 6)
	for q := 0; q < s; q++ {
		br, bi := r0[q]+r4[q], i0[q]+i4[q]
		dr, di := r2[q]+r6[q], i2[q]+i6[q]
		t0r, t1r, t0i, t1i := br+dr, br-dr, bi+di, bi-di
		br, bi = r1[q]+r5[q], i1[q]+i5[q]
		dr, di = r3[q]+r7[q], i3[q]+i7[q]
		t2r, t3r, t2i, t3i := br+dr, br-dr, bi+di, bi-di
		a[q], e[q] = t0r+t2r, t0i+t2i
		b[q], f[q] = t1r+t3i, t1i-t3r
		c[q], g[q] = t0r-t2r, t0i-t2i
		d[q], h[q] = t1r-t3i, t1i+t3r
	}
	root := T(math.Sqrt2 / 2)
	a, b, c, d = column(yr, 1), column(yr, 3), column(yr, 5), column(yr, 7)
	e, f, g, h = column(yi, 1), column(yi, 3), column(yi, 5), column(yi, 7)
	for q := 0; q < s; q++ {
		cr, ci := r0[q]-r4[q], i0[q]-i4[q]
		dr, di := i2[q]-i6[q], r6[q]-r2[q] // times -j
		t0r, t1r, t0i, t1i := cr+dr, cr-dr, ci+di, ci-di
		u, v := r1[q]-r5[q], i1[q]-i5[q]
		cr, ci = root*(u+v), root*(v-u)
		u, v = r3[q]-r7[q], i3[q]-i7[q]
		dr, di = root*(v-u), -root*(u+v)
		t2r, t3r, t2i, t3i := cr+dr, cr-dr, ci+di, ci-di
		a[q], e[q] = t0r+t2r, t0i+t2i
		b[q], f[q] = t1r+t3i, t1i-t3r
		c[q], g[q] = t0r-t2r, t0i-t2i
		d[q], h[q] = t1r-t3i, t1i+t3r
	}
}

// last2 is the plain step of radix 2.
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
