package audio_test

import (
	"fmt"
	"io"

	"alidade/pkg/audio"
)

func Example() {
	take := audio.NewBlock(2, 5)
	copy(take.Channel(0), []float32{1, 2, 3, 4, 5})
	copy(take.Channel(1), []float32{10, 20, 30, 40, 50})

	// The channels swapped, the second one halved.
	src, err := audio.Map(audio.FromBlock(48000, take), []int{1, 0}, []float64{1, 0.5})
	if err != nil {
		fmt.Println(err)
		return
	}
	block := audio.NewBlock(src.Format().Channels, 3)
	for {
		n, err := src.Read(block)
		part := block.Slice(0, n)
		if err == io.EOF {
			break
		}
		if err != nil {
			fmt.Println(err)
			return
		}
		fmt.Println(part.Channel(0), part.Channel(1))
	}
	// Output:
	// [10 20 30] [0.5 1 1.5]
	// [40 50] [2 2.5]
}
