package virtual

import (
	"hash/fnv"
	"math/rand/v2"
)

// partKey is the second half of a part's seed.
func partKey(part string) uint64 {
	h := fnv.New64a()
	h.Write([]byte(part))
	return h.Sum64()
}

// stream is the random stream of one part of the world.
func stream(seed uint64, part string) *rand.Rand {
	return rand.New(rand.NewPCG(seed, partKey(part)))
}

// white gives the deviates of a gyro's white noise: deviate i of bench second s is the i-th of a stream that belongs
// to that second alone, so that frames which were never made change none that are.
type white struct {
	seed, key uint64
	source    *rand.PCG
	normals   *rand.Rand
	second    int64
	next      int // index of the next deviate within the second
}

func newWhite(seed uint64, part string) *white {
	source := rand.NewPCG(0, 0)
	return &white{seed: seed, key: partKey(part), source: source, normals: rand.New(source), second: -1}
}

// seek makes deviate index of the given second the next one.
func (w *white) seek(second int64, index int) {
	if second != w.second || index < w.next {
		w.source.Seed(w.seed^scramble(uint64(second)), w.key)
		w.second, w.next = second, 0
	}
	for ; w.next < index; w.next++ {
		w.normals.NormFloat64()
	}
}

// scramble spreads neighbouring numbers over all 64 bits, one to one (the finaliser of splitmix64; Steele, Lea and
// Flood, OOPSLA 2014), so that the streams of neighbouring seconds and seeds have nothing in common.
func scramble(x uint64) uint64 {
	x += 0x9e3779b97f4a7c15
	x = (x ^ x>>30) * 0xbf58476d1ce4e5b9
	x = (x ^ x>>27) * 0x94d049bb133111eb
	return x ^ x>>31
}
