package link

import (
	"context"
	"errors"
	"fmt"
	"io"
	"sync"
	"time"

	"proofrate/instruments"
)

const (
	unreadMax = 1 << 20                // bytes; beyond, the pump leaves the rest to the port, which stops a TCP peer
	queuedMax = 64                     // requests accepted and not yet written; beyond, the peer takes nothing
	grace     = 500 * time.Millisecond // for what was accepted before Close; a 64 byte line at 9600 baud takes 70 ms
	emptyMax  = 100                    // reads of nothing in a row before the port counts as gone
)

var errTakesNothing = errors.New("the instrument takes no bytes; check its power, its cable and the link's settings")

// port is what serial and TCP ports have in common.
type port interface {
	io.ReadWriteCloser
}

// stream is a Link over a port. Two goroutines serve it: the pump, which alone reads and ends with the port, and the
// writer, which alone writes and ends when Close closes the queue or a write fails.
type stream struct {
	name    string
	port    port
	clock   *Wall
	release func() error  // what else to give back at Close
	news    chan struct{} // of one place: something has changed for Await
	out     chan []byte
	wrote   chan struct{} // closed by the writer as it leaves
	pump    sync.WaitGroup

	mu        sync.Mutex // guards what follows
	room      sync.Cond  // the unread have become fewer, or the link is shut
	in        inbox
	gone      error
	shut      bool // no more sends
	abandoned bool // no more writes
}

func newStream(name string, p port, clock *Wall, release func() error) *stream {
	s := &stream{name: name, port: p, clock: clock, release: release,
		news: make(chan struct{}, 1), out: make(chan []byte, queuedMax), wrote: make(chan struct{})}
	s.room.L = &s.mu
	s.pump.Go(s.read)
	go s.write()
	return s
}

// read is the pump.
func (s *stream) read() {
	buffer := make([]byte, 64<<10)
	for empty := 0; empty < emptyMax; {
		n, err := s.port.Read(buffer)
		if n > 0 {
			empty = 0
			s.take(buffer[:n])
		}
		if err != nil {
			s.fail(err)
			return
		}
		if n == 0 {
			empty++
		}
	}
	s.fail(io.ErrNoProgress)
}

func (s *stream) take(p []byte) {
	at := s.clock.Now()
	s.mu.Lock()
	defer s.mu.Unlock()
	for s.in.size() > unreadMax && !s.shut {
		s.room.Wait()
	}
	s.in.put(p, at)
	s.notify()
}

// write is the writer. It asks before each write whether it still may: after a port's Close its descriptor may belong
// to another file.
func (s *stream) write() {
	defer close(s.wrote)
	for p := range s.out {
		for len(p) > 0 {
			if !s.mayWrite() {
				return
			}
			n, err := s.port.Write(p)
			if err == nil && n == 0 {
				err = io.ErrShortWrite
			}
			if err != nil {
				s.fail(err)
				return
			}
			p = p[n:]
		}
	}
}

func (s *stream) mayWrite() bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	return !s.abandoned
}

// fail notes why the link is gone; the first cause stands. A port says the same of being pulled out and of our own
// Close, so shut tells them apart.
func (s *stream) fail(err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	switch {
	case s.gone != nil:
	case s.shut:
		s.gone = &GoneError{s.name, ErrClosed}
	default:
		s.gone = &GoneError{s.name, fmt.Errorf("lost: %w; check the cable and the instrument's power", err)}
	}
	s.notify()
}

func (s *stream) notify() {
	select {
	case s.news <- struct{}{}:
	default:
	}
}

func (s *stream) Send(p []byte) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.gone != nil {
		return s.gone
	}
	if s.shut {
		return &GoneError{s.name, ErrClosed}
	}
	select {
	case s.out <- append([]byte(nil), p...):
		return nil
	default:
		return &GoneError{s.name, errTakesNothing}
	}
}

func (s *stream) Peek() []byte {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.in.peek()
}

func (s *stream) Discard(n int) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.in.discard(n)
	s.room.Signal()
}

func (s *stream) LastArrival() time.Time {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.in.last
}

func (s *stream) Clock() instruments.Clock { return s.clock }

func (s *stream) Await(ctx context.Context, until time.Time) error {
	for {
		if more, err := s.state(); more || err != nil {
			return err
		}
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		left := until.Sub(s.clock.Now())
		if left <= 0 {
			return nil
		}
		timer := time.NewTimer(s.clock.wall(left))
		select {
		case <-s.news:
		case <-ctx.Done():
		case <-timer.C:
		}
		timer.Stop()
	}
}

func (s *stream) state() (more bool, err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.in.more() {
		return true, nil
	}
	return false, s.gone
}

// Close takes no further send, gives those accepted a grace, closes the port and waits for the pump. What the port
// would not take is reported, not waited for.
func (s *stream) Close() error {
	if !s.shutOnce() {
		return nil
	}
	var late error
	if !s.written(grace) {
		late = s.abandon()
	}
	err := s.port.Close()
	s.pump.Wait()
	if s.release != nil {
		err = errors.Join(err, s.release())
	}
	if err = errors.Join(late, err); err != nil {
		return &GoneError{s.name, err}
	}
	return nil
}

func (s *stream) shutOnce() bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.shut {
		return false
	}
	s.shut = true
	close(s.out)
	s.room.Broadcast()
	return true
}

// abandon gives up what is still to be written. Emptying a serial port's own buffer frees a write that is stuck in it,
// so that it does not outlive the descriptor.
func (s *stream) abandon() error {
	s.mu.Lock()
	s.abandoned = true
	s.mu.Unlock()
	if p, ok := s.port.(interface{ ResetOutputBuffer() error }); ok {
		if err := p.ResetOutputBuffer(); err == nil {
			s.written(grace)
		}
	}
	return fmt.Errorf("closed with bytes unsent: %w", errTakesNothing)
}

func (s *stream) written(within time.Duration) bool {
	timer := time.NewTimer(within)
	defer timer.Stop()
	select {
	case <-s.wrote:
		return true
	case <-timer.C:
		return false
	}
}
