//go:build unix

package link

import (
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/creack/pty"
	"golang.org/x/term"
)

var line = SerialSettings{Baud: 115200, DataBits: 8, Parity: ParityNone, StopBits: 1}

// terminal opens a raw pseudo-terminal: the instrument's end, and the path of the host's.
func terminal(t *testing.T) (far *os.File, path string) {
	t.Helper()
	far, near, err := pty.Open()
	if err != nil {
		t.Skipf("no pseudo-terminals here: %v", err)
	}
	if _, err := term.MakeRaw(int(near.Fd())); err != nil {
		t.Fatal(err)
	}
	if err := syscall.SetNonblock(int(far.Fd()), true); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { far.Close(); near.Close() })
	return far, near.Name()
}

func TestSerialExchange(t *testing.T) {
	far, path := terminal(t)
	if _, err := far.WriteString("power-on greeting"); err != nil {
		t.Fatal(err)
	}
	settings := line
	settings.Settle = 20 * time.Millisecond
	l, err := OpenSerial(t.Context(), path, settings, WallClock())
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	if got := string(l.Peek()); got != "" {
		t.Errorf("unread at the start: %q", got)
	}
	if err := l.Send([]byte("RATE?\r\n\x00\x11\x13")); err != nil { // XON and XOFF pass
		t.Fatal(err)
	}
	buffer := make([]byte, 100)
	n, err := far.Read(buffer)
	if got := string(buffer[:n]); err != nil || got != "RATE?\r\n\x00\x11\x13" {
		t.Fatalf("the instrument received %q, %v", got, err)
	}
	if _, err := far.WriteString("+1.5\r\n\x04\xff"); err != nil {
		t.Fatal(err)
	}
	until := time.Now().Add(10 * time.Second)
	for len(l.Peek()) < 8 && time.Now().Before(until) {
		if err := l.Await(t.Context(), until); err != nil {
			t.Fatal(err)
		}
	}
	if got := string(l.Peek()); got != "+1.5\r\n\x04\xff" {
		t.Errorf("got %q", got)
	}
}

func TestSerialPortIsMissing(t *testing.T) {
	path := filepath.Join(t.TempDir(), "ttyUSB9")
	_, err := OpenSerial(t.Context(), path, line, WallClock())
	if err == nil || !strings.Contains(err.Error(), path+": there is no such port; plug") {
		t.Errorf("open: %v", err)
	}
	// The library says so with a bare error of the operating system.
	if got := explain(&fs.PathError{Op: "open", Path: path, Err: syscall.ENOENT}); got != errNoPort {
		t.Errorf("explain: %v", got)
	}
}

func TestSerialFileIsNoPort(t *testing.T) {
	path := filepath.Join(t.TempDir(), "file")
	if err := os.WriteFile(path, nil, 0o600); err != nil {
		t.Fatal(err)
	}
	_, err := OpenSerial(t.Context(), path, line, WallClock())
	if err == nil || !strings.Contains(err.Error(), "it is not a serial port") {
		t.Errorf("open: %v", err)
	}
	// A failed opening leaves no lock behind.
	release, err := lockPort(path)
	if err != nil {
		t.Fatal(err)
	}
	release()
}

func TestSerialPortHasOneUser(t *testing.T) {
	_, path := terminal(t)
	alias := filepath.Join(t.TempDir(), "by-id")
	if err := os.Symlink(path, alias); err != nil {
		t.Fatal(err)
	}
	first, err := OpenSerial(t.Context(), path, line, WallClock())
	if err != nil {
		t.Fatal(err)
	}
	if _, err := OpenSerial(t.Context(), alias, line, WallClock()); err == nil || !strings.Contains(err.Error(), "another run has this port") {
		t.Errorf("second opening: %v", err)
	}
	if err := first.Close(); err != nil {
		t.Fatal(err)
	}
	second, err := OpenSerial(t.Context(), alias, line, WallClock())
	if err != nil {
		t.Fatalf("after the first has closed: %v", err)
	}
	second.Close()
}

func TestSerialUnplugged(t *testing.T) {
	far, path := terminal(t)
	l, err := OpenSerial(t.Context(), path, line, WallClock())
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	far.Close()
	err = l.Await(t.Context(), time.Now().Add(10*time.Second))
	if _, gone := errors.AsType[*GoneError](err); !gone || errors.Is(err, ErrClosed) {
		t.Errorf("await: %v", err)
	}
}

// TestSerialCloseIsNotHeldByAStuckWrite: the port's Close frees no blocked write, and a write that outlived it would
// go into whatever file got the descriptor.
func TestSerialCloseIsNotHeldByAStuckWrite(t *testing.T) {
	_, path := terminal(t) // the instrument reads nothing
	l, err := OpenSerial(t.Context(), path, line, WallClock())
	if err != nil {
		t.Fatal(err)
	}
	block := make([]byte, 64<<10)
	if err := l.Send(block); err != nil {
		t.Fatal(err)
	}
	begin := time.Now()
	if err := l.Close(); !errors.Is(err, errTakesNothing) {
		t.Errorf("close: %v, want what was not sent", err)
	}
	if took := time.Since(begin); took > 4*grace {
		t.Errorf("close took %v", took)
	}
	file, err := os.Create(filepath.Join(t.TempDir(), "next"))
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	time.Sleep(50 * time.Millisecond)
	if info, err := file.Stat(); err != nil || info.Size() != 0 {
		t.Errorf("a late write went into another file: %d bytes, %v", info.Size(), err)
	}
}

func TestSerialSettings(t *testing.T) {
	if mode, err := line.mode(); err != nil || mode.BaudRate != 115200 || mode.DataBits != 8 {
		t.Errorf("%+v, %v", mode, err)
	}
	for name, change := range map[string]func(*SerialSettings){
		"baud":   func(s *SerialSettings) { s.Baud = 0 },
		"data":   func(s *SerialSettings) { s.DataBits = 9 },
		"parity": func(s *SerialSettings) { s.Parity = "" },
		"stop":   func(s *SerialSettings) { s.StopBits = 0 },
	} {
		wrong := line
		change(&wrong)
		if _, err := wrong.mode(); err == nil || !strings.Contains(err.Error(), name) {
			t.Errorf("%s: %v", name, err)
		}
	}
}
