package link

import (
	"context"
	"errors"
	"io"
	"net"
	"strings"
	"testing"
	"testing/synctest"
	"time"
)

// pipe is a stream link over net.Pipe, whose time a synctest bubble drives.
func pipe(pace float64) (Link, net.Conn) {
	near, far := net.Pipe()
	return newStream("pipe", near, ScaledClock(pace), nil), far
}

func TestStreamAwaitsMoreThanWasPeeked(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		l, far := pipe(1)
		defer l.Close()
		begin := l.Clock().Now()
		go func() {
			for _, part := range []string{"+1", "2.", "5\r\n"} {
				time.Sleep(time.Second)
				io.WriteString(far, part)
			}
		}()
		until := begin.Add(time.Minute)
		waits := 0
		for ; !strings.HasSuffix(string(l.Peek()), "\n"); waits++ {
			if err := l.Await(t.Context(), until); err != nil {
				t.Fatal(err)
			}
		}
		if got := string(l.Peek()); got != "+12.5\r\n" || waits != 3 {
			t.Errorf("%q after %d waits", got, waits)
		}
		if got := l.LastArrival().Sub(begin); got != 3*time.Second {
			t.Errorf("last byte after %v", got)
		}
		l.Discard(len(l.Peek()))
		if err := l.Await(t.Context(), until); err != nil {
			t.Errorf("await of nothing: %v", err)
		}
		if now := l.Clock().Now(); !now.Equal(until) {
			t.Errorf("await of nothing ended at %v", now.Sub(begin))
		}
	})
}

func TestStreamDeadlineIsOfItsClock(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		l, _ := pipe(60)
		defer l.Close()
		wall := time.Now()
		until := l.Clock().Now().Add(time.Minute)
		if err := l.Await(t.Context(), until); err != nil || l.Clock().Now().Before(until) {
			t.Errorf("await: %v at %v", err, l.Clock().Now())
		}
		if got := time.Since(wall); got < time.Second || got > time.Second+time.Millisecond {
			t.Errorf("a minute at pace 60 took %v of the wall", got)
		}
	})
}

func TestStreamCancelledAwaitReturnsItsCause(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		l, _ := pipe(1)
		defer l.Close()
		stopped := errors.New("operator")
		ctx, cancel := context.WithCancelCause(t.Context())
		go func() { time.Sleep(time.Second); cancel(stopped) }()
		begin := time.Now()
		if err := l.Await(ctx, begin.Add(time.Hour)); !errors.Is(err, stopped) || time.Since(begin) != time.Second {
			t.Errorf("await: %v after %v", err, time.Since(begin))
		}
	})
}

func TestStreamSendNeverWaits(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		l, _ := pipe(1) // the far end reads nothing
		begin := time.Now()
		var err error
		for sends := 0; err == nil; sends++ {
			if sends > queuedMax+1 {
				t.Fatal("the queue has no bound")
			}
			err = l.Send([]byte("RATE?\r\n"))
		}
		if !errors.Is(err, errTakesNothing) || time.Since(begin) != 0 {
			t.Errorf("send: %v after %v", err, time.Since(begin))
		}
		if err := l.Close(); !errors.Is(err, errTakesNothing) {
			t.Errorf("close: %v, want what was not sent", err)
		}
		if got := time.Since(begin); got > 2*grace {
			t.Errorf("close took %v", got)
		}
	})
}

func TestStreamCloseSendsWhatWasAccepted(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		l, far := pipe(1)
		got := make(chan string)
		go func() {
			time.Sleep(grace / 2)
			all, _ := io.ReadAll(far)
			got <- string(all)
		}()
		for _, line := range []string{"STOP\r\n", "OUTP OFF\r\n"} {
			if err := l.Send([]byte(line)); err != nil {
				t.Fatal(err)
			}
		}
		for range 2 {
			if err := l.Close(); err != nil {
				t.Errorf("close: %v", err)
			}
		}
		if got := <-got; got != "STOP\r\nOUTP OFF\r\n" {
			t.Errorf("the peer received %q", got)
		}
		if err := l.Send([]byte("x")); !errors.Is(err, ErrClosed) {
			t.Errorf("send after close: %v", err)
		}
	})
}

func TestStreamCloseEndsAnAwait(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		l, _ := pipe(1)
		done := make(chan error)
		go func() { done <- l.Await(t.Context(), time.Now().Add(time.Hour)) }()
		synctest.Wait()
		if err := l.Close(); err != nil {
			t.Error(err)
		}
		if err := <-done; !errors.Is(err, ErrClosed) {
			t.Errorf("await: %v", err)
		}
	})
}

func TestStreamPeerGone(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		l, far := pipe(1)
		defer l.Close()
		go func() { io.WriteString(far, "last"); far.Close() }()
		synctest.Wait()
		until := time.Now().Add(time.Hour)
		if err := l.Await(t.Context(), until); err != nil || string(l.Peek()) != "last" {
			t.Errorf("what arrived before is to be shown first: %v", err)
		}
		var gone *GoneError
		if err := l.Await(t.Context(), until); !errors.As(err, &gone) || errors.Is(err, ErrClosed) {
			t.Errorf("await: %v", err)
		}
		if err := l.Send([]byte("x")); !errors.As(err, &gone) {
			t.Errorf("send: %v", err)
		}
	})
}

// TestStreamHoldsTheUnreadInBounds: the pump stops when the host does not look, goes on when it does, and ends when
// the link is closed meanwhile.
func TestStreamHoldsTheUnreadInBounds(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		l, far := pipe(1)
		sent := make(chan int)
		go func() {
			n, err := 0, error(nil)
			for block := make([]byte, 64<<10); err == nil; {
				var k int
				k, err = far.Write(block)
				n += k
			}
			sent <- n
		}()
		synctest.Wait()
		held := len(l.Peek())
		if held <= unreadMax || held > unreadMax+(128<<10) {
			t.Errorf("%d bytes unread, want little more than %d", held, unreadMax)
		}
		l.Discard(held)
		synctest.Wait()
		if got := len(l.Peek()); got <= unreadMax {
			t.Errorf("%d bytes after room was made", got)
		}
		if err := l.Close(); err != nil {
			t.Error(err)
		}
		if got := <-sent; got < 2*unreadMax {
			t.Errorf("the peer sent %d bytes", got)
		}
	})
}

// silent is a port that reads nothing without an error, as a serial port does at a timeout.
type silent struct{ io.Writer }

func (silent) Read([]byte) (int, error) { return 0, nil }
func (silent) Close() error             { return nil }

func TestStreamOfEmptyReadsIsGone(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		l := newStream("silent", silent{io.Discard}, WallClock(), nil)
		defer l.Close()
		if err := l.Await(t.Context(), time.Now().Add(time.Hour)); !errors.Is(err, io.ErrNoProgress) {
			t.Errorf("await: %v", err)
		}
	})
}

func TestClockSleepsAtItsPace(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		for _, pace := range []float64{0.5, 1, 7, 1000} {
			clock, wall := ScaledClock(pace), time.Now()
			begin := clock.Now()
			if err := clock.Sleep(t.Context(), time.Minute); err != nil {
				t.Fatal(err)
			}
			passed, want := time.Since(wall), time.Duration(float64(time.Minute)/pace)
			if passed < want || passed > want+time.Microsecond {
				t.Errorf("pace %v: a minute took %v of the wall", pace, passed)
			}
			if got := clock.Now().Sub(begin); got < time.Minute {
				t.Errorf("pace %v: slept %v", pace, got)
			}
		}
		ctx, cancel := context.WithCancel(t.Context())
		cancel()
		if err := WallClock().Sleep(ctx, 0); !errors.Is(err, context.Canceled) {
			t.Errorf("sleep of a cancelled context: %v", err)
		}
	})
}

func TestUntilLeavesTheWallItsTime(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		for pace, want := range map[float64]time.Duration{0.5: time.Second, 1: time.Second, 60: time.Minute} {
			l, _ := pipe(pace)
			if got := Until(l, time.Second).Sub(l.Clock().Now()); got != want {
				t.Errorf("pace %v: a second's timeout ends after %v, want %v", pace, got, want)
			}
			l.Close()
		}
		host, _ := Memory(&world{now: start}, "table")
		if got := Until(host, time.Second); got != at(time.Second) {
			t.Errorf("on a memory link: %v", got.Sub(start))
		}
	})
}

func TestTCP(t *testing.T) {
	listener, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	echoed := make(chan error, 1)
	go func() {
		c, err := listener.Accept()
		if err == nil {
			_, err = io.Copy(c, c)
			c.Close()
		}
		echoed <- err
	}()
	l, err := DialTCP(t.Context(), listener.Addr().String(), WallClock())
	if err != nil {
		t.Fatal(err)
	}
	if err := l.Send([]byte("*IDN?\n")); err != nil {
		t.Fatal(err)
	}
	until := time.Now().Add(10 * time.Second)
	for len(l.Peek()) < 6 && time.Now().Before(until) {
		if err := l.Await(t.Context(), until); err != nil {
			t.Fatal(err)
		}
	}
	if got := string(l.Peek()); got != "*IDN?\n" {
		t.Errorf("got %q", got)
	}
	if err := l.Close(); err != nil {
		t.Error(err)
	}
	if err := <-echoed; err != nil {
		t.Error(err)
	}
	listener.Close()
	if _, err := DialTCP(t.Context(), listener.Addr().String(), WallClock()); err == nil {
		t.Error("dialled a port that nobody serves")
	}
}
