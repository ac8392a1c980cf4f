package link

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"net/url"
	"os"
	"path/filepath"
	"time"

	"github.com/gofrs/flock"
	"go.bug.st/serial"
)

// Parity is a serial line's parity bit; "" is unset.
type Parity string

const (
	ParityNone Parity = "none"
	ParityOdd  Parity = "odd"
	ParityEven Parity = "even"
)

var parities = map[Parity]serial.Parity{
	ParityNone: serial.NoParity, ParityOdd: serial.OddParity, ParityEven: serial.EvenParity,
}

var stopBits = map[int]serial.StopBits{1: serial.OneStopBit, 2: serial.TwoStopBits}

// SerialSettings is how a serial line is set. There is no flow control.
type SerialSettings struct {
	Baud     int
	DataBits int    // 5 to 8
	Parity   Parity // none, odd, even
	StopBits int    // 1 or 2
	// Settle is waited for after the opening, which pulses the modem lines and so resets some instruments; what
	// arrives before is thrown away.
	Settle time.Duration
}

func (s SerialSettings) mode() (*serial.Mode, error) {
	parity, ok := parities[s.Parity]
	if !ok {
		return nil, fmt.Errorf("parity %q: expected none, odd or even", s.Parity)
	}
	stop, ok := stopBits[s.StopBits]
	if !ok {
		return nil, fmt.Errorf("%d stop bits: expected 1 or 2", s.StopBits)
	}
	if s.DataBits < 5 || s.DataBits > 8 {
		return nil, fmt.Errorf("%d data bits: expected 5 to 8", s.DataBits)
	}
	if s.Baud <= 0 {
		return nil, fmt.Errorf("%d baud: expected a positive rate", s.Baud)
	}
	return &serial.Mode{BaudRate: s.Baud, DataBits: s.DataBits, Parity: parity, StopBits: stop}, nil
}

// OpenSerial opens a serial port. It keeps other programs of this project off the port until Close, waits for the
// settling time on clock and starts with nothing unread.
func OpenSerial(ctx context.Context, path string, settings SerialSettings, clock *Wall) (Link, error) {
	name := "serial:" + path
	mode, err := settings.mode()
	if err != nil {
		return nil, &GoneError{name, err}
	}
	if _, err := os.Stat(path); errors.Is(err, fs.ErrNotExist) {
		return nil, &GoneError{name, errNoPort} // before a lock file is made for it
	}
	release, err := lockPort(path)
	if err != nil {
		return nil, &GoneError{name, err}
	}
	p, err := serial.Open(path, mode)
	if err != nil {
		return nil, &GoneError{name, errors.Join(explain(err), release())}
	}
	err = settle(ctx, p, settings.Settle, clock)
	if err != nil {
		return nil, &GoneError{name, errors.Join(err, p.Close(), release())}
	}
	return newStream(name, p, clock, release), nil
}

func settle(ctx context.Context, p serial.Port, d time.Duration, clock *Wall) error {
	if err := p.SetReadTimeout(serial.NoTimeout); err != nil {
		return err
	}
	if err := clock.Sleep(ctx, d); err != nil {
		return err
	}
	return p.ResetInputBuffer()
}

var errNoPort = errors.New("there is no such port; plug the instrument in and switch it on, or correct the link in the bench file")

// explain says what to do about a port that does not open. A port that is missing is a bare error of the operating
// system, everything else a PortError.
func explain(err error) error {
	if errors.Is(err, fs.ErrNotExist) {
		return errNoPort
	}
	refused, ok := errors.AsType[*serial.PortError](err)
	if !ok {
		return err
	}
	remedy := map[serial.PortErrorCode]string{
		serial.PortBusy:          "another program has it open; close that program",
		serial.PermissionDenied:  "this user may not open it; join the group that owns the port (often dialout)",
		serial.InvalidSerialPort: "it is not a serial port; correct the link in the bench file",
		serial.InvalidSpeed:      "it does not know this baud rate; correct the profile's serial settings",
	}[refused.Code()]
	if remedy == "" {
		return err
	}
	return fmt.Errorf("%w; %s", err, remedy)
}

// lockPort takes the operating system's lock for a port, by the name of the device behind any symbolic link: the
// port's own exclusive access does not bind a privileged user.
func lockPort(path string) (release func() error, err error) {
	real, err := filepath.EvalSymlinks(path)
	if err == nil {
		real, err = filepath.Abs(real)
	}
	if err != nil {
		return nil, err
	}
	file := filepath.Join(os.TempDir(), "proofrate-port-"+url.PathEscape(real)+".lock")
	lock := flock.New(file, flock.SetPermissions(0o666)) // any user of the station may take it next
	held, err := lock.TryLock()
	if err != nil {
		return nil, fmt.Errorf("lock the port: %w", err)
	}
	if !held {
		return nil, fmt.Errorf("another run has this port (its lock is %s); wait for it to end or stop it", file)
	}
	return lock.Unlock, nil
}
