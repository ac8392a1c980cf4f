// Package profile makes drivers out of documents: a profile says how one instrument model is spoken to, in one of three
// families, and fills the roles of package instruments with it.
//
// lines: text commands and replies. registers: Modbus. frames: a binary stream. An action is what a role can be told to
// do, a reading what it can be asked for; a template is a text with {captures}.
//
// Invariants: one request is in flight a link, others queue; every wait ends at a deadline of the link's Clock; what
// arrived before a request was sent is thrown away, so that a late answer is not taken for the next; an answer that
// cannot be read is an error, never a guess; a value whose unit does not fit is refused.
//
//	p, file, problems := profile.Load("turntable-text", text)
//	table, err := p.Table(link, "T1")
package profile
