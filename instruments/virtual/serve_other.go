//go:build !unix

package virtual

// openSerial offers the instrument on TCP: this system has no pseudo-terminals.
func (s *Server) openSerial(o *offered) error { return s.openTCP(o) }
