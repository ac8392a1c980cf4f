// Package link carries bytes between the program and one instrument.
//
// A Link is the byte pipe to one instrument as the host sees it: Send gives bytes away and never waits for the peer;
// Peek shows what has arrived, Discard forgets what has been used, and Await waits for more. Of the three kinds,
// Memory reaches a virtual instrument in the same goroutine, OpenSerial a serial port, DialTCP a TCP port. A Device is
// the far end of a memory link; a Pacer is the virtual world's clock, which moves the physics while the host waits.
//
// Invariants: one goroutine uses a Link, but any may Close it. Deadlines are points of the link's Clock, never of a
// context. Whoever opens a link closes it; Close says what could no longer be sent. Only a serial or TCP link owns
// goroutines (a pump that reads, a writer that writes), and Close ends both. A serial port has one user: a lock of the
// operating system keeps a second program out, whatever its rights.
//
//	l, err := link.OpenSerial(ctx, "/dev/ttyUSB0", settings, link.WallClock())
//	until := link.Until(l, 500*time.Millisecond)
//	err = l.Send([]byte("RATE?\r\n"))
//	for !bytes.Contains(l.Peek(), []byte("\r\n")) && l.Clock().Now().Before(until) {
//		err = l.Await(ctx, until)
//	}
package link
