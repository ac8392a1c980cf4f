package link

import (
	"context"
	"net"
	"time"
)

// dialTimeout is for an instrument on the station's own network.
const dialTimeout = 5 * time.Second

// DialTCP connects to an instrument's TCP port; address is "host:port".
func DialTCP(ctx context.Context, address string, clock *Wall) (Link, error) {
	name := "tcp:" + address
	dialer := net.Dialer{Timeout: dialTimeout}
	connection, err := dialer.DialContext(ctx, "tcp", address)
	if err != nil {
		return nil, &GoneError{name, err}
	}
	return newStream(name, connection, clock, nil), nil
}
