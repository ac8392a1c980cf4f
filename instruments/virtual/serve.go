package virtual

import (
	"context"
	"errors"
	"fmt"
	"io"
	"net"
	"sync"
	"time"

	"proofrate/instruments/link"
)

const (
	serveStep  = time.Millisecond // of the wall, between two looks at the ports
	serveQueue = 256              // pieces to or from a port; a serial line without flow control loses what is more
	serveRead  = 4096             // bytes
)

// Endpoint is one instrument as it is offered.
type Endpoint struct {
	Name    string // "table", "gyro-1"
	Address string // "serial:/dev/pts/3" or "tcp:127.0.0.1:40001", as a bench file's link
}

// Server offers a World on real ports: the supply on a TCP port of the loopback interface, all else on pseudo-terminals
// (where the system has none, on TCP too). Its goroutines only move bytes; the world itself belongs to the one that
// calls Run.
type Server struct {
	world     *World
	endpoints []*offered
	running   sync.WaitGroup
}

// offered is one endpoint: the host's end of its memory link, and a port that a program may open.
type offered struct {
	Endpoint
	host link.Link
	in   chan []byte // from the port; its reader ends when the port is closed
	out  chan []byte // to the port; its writer ends when Close closes this
	stop func() error
}

// Offer opens a port for every instrument. The caller closes the server.
func Offer(w *World) (*Server, error) {
	s := &Server{world: w}
	for _, e := range w.endpoints() {
		if err := s.offer(e.name); err != nil {
			return nil, errors.Join(fmt.Errorf("offer %s: %w", e.name, err), s.Close())
		}
	}
	return s, nil
}

func (s *Server) offer(name string) error {
	host, err := s.world.Link(name)
	if err != nil {
		return err
	}
	o := &offered{host: host, in: make(chan []byte, serveQueue), out: make(chan []byte, serveQueue)}
	o.Name = name
	open := s.openSerial
	if name == "supply" {
		open = s.openTCP
	}
	if err := open(o); err != nil {
		return err
	}
	s.endpoints = append(s.endpoints, o)
	return nil
}

// Endpoints are all that is offered.
func (s *Server) Endpoints() []Endpoint {
	list := make([]Endpoint, len(s.endpoints))
	for i, o := range s.endpoints {
		list[i] = o.Endpoint
	}
	return list
}

// Run lets the world pass pace of its seconds a second of the wall, and carries bytes between instruments and ports,
// until the context ends; it returns the cause.
func (s *Server) Run(ctx context.Context, pace float64) error {
	clock := link.ScaledClock(pace)
	origin, start := clock.Now(), s.world.Now()
	step := time.Duration(float64(serveStep) * pace)
	never := func() bool { return false }
	for {
		for _, o := range s.endpoints {
			if err := o.receive(); err != nil {
				return err
			}
		}
		if err := s.world.Advance(ctx, start.Add(clock.Now().Sub(origin)), never); err != nil {
			return err
		}
		for _, o := range s.endpoints {
			o.send()
		}
		if err := clock.Sleep(ctx, step); err != nil {
			return err
		}
	}
}

// receive gives the instrument what has come in.
func (o *offered) receive() error {
	for {
		select {
		case p := <-o.in:
			if err := o.host.Send(p); err != nil {
				return err
			}
		default:
			return nil
		}
	}
}

// send puts on the port what the instrument has sent; what the port does not take is lost, as on a line.
func (o *offered) send() {
	p := o.host.Peek()
	if len(p) == 0 {
		return
	}
	select {
	case o.out <- append([]byte(nil), p...):
	default:
	}
	o.host.Discard(len(p))
}

// Close takes the ports away and waits for what served them.
func (s *Server) Close() error {
	var all error
	for _, o := range s.endpoints {
		close(o.out)
		all = errors.Join(all, o.stop(), o.host.Close())
	}
	s.endpoints = nil
	s.running.Wait()
	return all
}

// read hands on what arrives on a port, until it is closed or its peer is.
func (o *offered) read(port io.Reader) {
	for {
		p := make([]byte, serveRead)
		n, err := port.Read(p)
		if n > 0 {
			select {
			case o.in <- p[:n]:
			default: // nobody runs the world
			}
		}
		if err != nil {
			return
		}
	}
}

// openTCP listens on the loopback interface. One client at a time is served; the next one waits for it to leave.
func (s *Server) openTCP(o *offered) error {
	listener, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		return err
	}
	o.Address = "tcp:" + listener.Addr().String()
	c := &client{}
	o.stop = func() error { return errors.Join(listener.Close(), c.end()) }
	s.running.Go(func() { // ends with the listener
		for {
			connection, err := listener.Accept()
			if err != nil {
				return
			}
			if !c.begin(connection) {
				return
			}
			o.read(connection)
			c.leave()
		}
	})
	s.running.Go(func() { // ends with the queue
		for p := range o.out {
			c.write(p)
		}
	})
	return nil
}

// client is the TCP client that is served now, if there is one.
type client struct {
	mu         sync.Mutex
	connection net.Conn
	ended      bool
}

// begin takes a client in; false once the server has ended.
func (c *client) begin(connection net.Conn) bool {
	c.mu.Lock()
	defer c.mu.Unlock()
	if c.ended {
		connection.Close()
		return false
	}
	c.connection = connection
	return true
}

func (c *client) now() net.Conn {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.connection
}

func (c *client) write(p []byte) {
	if connection := c.now(); connection != nil {
		connection.Write(p) // a client that has left is noticed by the reader
	}
}

func (c *client) leave() {
	c.mu.Lock()
	defer c.mu.Unlock()
	if c.connection != nil {
		c.connection.Close()
		c.connection = nil
	}
}

func (c *client) end() error {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.ended = true
	if c.connection == nil {
		return nil
	}
	err := c.connection.Close()
	c.connection = nil
	return err
}
