//go:build unix

package virtual

import (
	"errors"
	"os"
	"syscall"

	"github.com/creack/pty"
	"golang.org/x/term"
)

// openSerial makes a pseudo-terminal whose terminal side a program opens as a serial port.
func (s *Server) openSerial(o *offered) error {
	port, terminal, err := rawTerminal()
	if err != nil {
		return err
	}
	o.Address = "serial:" + terminal.Name()
	o.stop = func() error { return errors.Join(port.Close(), terminal.Close()) }
	s.running.Go(func() { o.read(port) }) // ends with the port
	s.running.Go(func() {                 // ends with the queue, or the port
		for p := range o.out {
			if _, err := port.Write(p); err != nil {
				return
			}
		}
	})
	return nil
}

// rawTerminal is a pseudo-terminal that passes bytes unchanged. Its terminal side stays open, or the other would fail
// whenever no program has it.
func rawTerminal() (port, terminal *os.File, err error) {
	port, terminal, err = pty.Open()
	if err != nil {
		return nil, nil, err
	}
	// A new one echoes and edits lines.
	if _, err = term.MakeRaw(int(terminal.Fd())); err == nil {
		// Fd, which pty.Open has called, leaves the file blocking, and then Close would not end a Read.
		err = syscall.SetNonblock(int(port.Fd()), true)
	}
	if err != nil {
		return nil, nil, errors.Join(err, port.Close(), terminal.Close())
	}
	return port, terminal, nil
}
