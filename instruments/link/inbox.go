package link

import (
	"fmt"
	"time"
)

// inbox holds what has arrived and is unread.
type inbox struct {
	bytes []byte
	head  int // bytes before it have been discarded
	seen  int // length of what peek last showed, less what was discarded since
	last  time.Time
}

func (b *inbox) put(p []byte, at time.Time) {
	b.bytes = append(b.bytes, p...)
	b.last = at
}

func (b *inbox) size() int  { return len(b.bytes) - b.head }
func (b *inbox) more() bool { return b.size() > b.seen }

func (b *inbox) peek() []byte {
	b.seen = b.size()
	return b.bytes[b.head:]
}

// discard moves the rest down only once it is the smaller half, so that taking frame by frame stays linear.
func (b *inbox) discard(n int) {
	if n < 0 || n > b.size() {
		panic(fmt.Sprintf("link: discard of %d bytes where %d are unread", n, b.size()))
	}
	b.head += n
	b.seen = max(0, b.seen-n)
	if b.head > b.size() || b.size() == 0 {
		b.bytes = b.bytes[:copy(b.bytes, b.bytes[b.head:])]
		b.head = 0
	}
}
