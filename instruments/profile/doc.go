// Package profile makes drivers out of documents: a profile says how one instrument model is spoken to, and fills the
// roles of package instruments with it.
//
// A profile is of one of three families. Lines: text commands and answers. Registers: Modbus, over a serial line or
// TCP. Frames: a binary stream. An action is what a role can be told to do, a reading what it can be asked for; a form
// is a text with {captures} in it. An Exchange is one request and what came back.
//
// Invariants: what stands in a Profile's fields is known without I/O, and a profile that cannot fill its roles is not
// loaded; one request is in flight a link, others queue; every wait ends at a time of the link's Clock; an answer that
// may still come to a request that was given up is waited for before the next request is sent, so that it is not taken
// for that one's; an answer that cannot be read is an error, never a guess; a value that does not fit is refused,
// never clipped. One goroutine uses the drivers of a link.
//
//	p, file, problems := profile.Load("turntable-text", text)
//	table, err := p.Table(link, "T1")
package profile
