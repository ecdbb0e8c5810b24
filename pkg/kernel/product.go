package kernel

import "fmt"

// AddProduct adds complex products, real and imaginary parts in slices of the
// same length: s[k] += a[k]·b[k]. s may be neither a nor b. It panics if the
// lengths differ.
func AddProduct(sr, si, ar, ai, br, bi []float32) {
	n := len(sr)
	if len(si) != n || len(ar) != n || len(ai) != n || len(br) != n || len(bi) != n {
		panic(fmt.Sprintf("kernel: products of %d, %d, %d, %d, %d and %d values", n, len(si), len(ar), len(ai), len(br), len(bi)))
	}
	if vector && n >= 8 {
		whole := n &^ 7
		addProductAVX2(&sr[0], &si[0], &ar[0], &ai[0], &br[0], &bi[0], whole)
		sr, si, ar, ai, br, bi = sr[whole:], si[whole:], ar[whole:], ai[whole:], br[whole:], bi[whole:]
	}
	addProduct(sr, si, ar, ai, br, bi)
}

// addProduct is the definition.
func addProduct(sr, si, ar, ai, br, bi []float32) {
	n := len(sr)
	si, ar, ai, br, bi = si[:n], ar[:n], ai[:n], br[:n], bi[:n]
	for k := range n {
		xr, xi, wr, wi := ar[k], ai[k], br[k], bi[k]
		sr[k] += xr*wr - xi*wi
		si[k] += xr*wi + xi*wr
	}
}
