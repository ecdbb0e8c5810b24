package wav

import (
	"bytes"
	"encoding/xml"
	"io"
	"strconv"
	"strings"
)

// Caps on an iXML chunk: real ones have some kilobytes.
const (
	maxIXML      = 512 << 10
	maxXMLNodes  = 20000
	maxXMLTokens = 200000
	maxXMLDepth  = 32
)

// IXML is what an iXML chunk says about a take. Texts are empty and numbers 0
// where it says nothing.
type IXML struct {
	Project string  `json:"project,omitempty"`
	Scene   string  `json:"scene,omitempty"`
	Take    string  `json:"take,omitempty"`
	Tape    string  `json:"tape,omitempty"`
	Note    string  `json:"note,omitempty"`
	Circled string  `json:"circled,omitempty"`
	FileUID string  `json:"file_uid,omitempty"`
	Speed   Speed   `json:"speed,omitzero"`
	Tracks  []Track `json:"tracks,omitempty"`
	FileSet FileSet `json:"file_set,omitzero"`

	root *node
}

// Speed is the SPEED of an iXML chunk.
type Speed struct {
	FileSampleRate      int    `json:"file_sample_rate_hz,omitempty"`
	DigitizerSampleRate int    `json:"digitizer_sample_rate_hz,omitempty"`
	BitDepth            int    `json:"bit_depth,omitempty"`
	TimecodeRate        string `json:"timecode_rate,omitempty"` // frames per second, "30000/1001"
	TimecodeFlag        string `json:"timecode_flag,omitempty"` // DF or NDF
	Timestamp           *int64 `json:"timestamp_samples,omitempty"`
	TimestampRate       int    `json:"timestamp_rate_hz,omitempty"`
}

// Track is one track of an iXML chunk.
type Track struct {
	Channel    int    `json:"channel"`    // of the recorder, 1-based
	Interleave int    `json:"interleave"` // position in this file, 1-based
	Name       string `json:"name,omitempty"`
	Function   string `json:"function,omitempty"`
}

// FileSet is the FILE_SET of an iXML chunk: the files that belong together.
type FileSet struct {
	TotalFiles int    `json:"total_files,omitempty"`
	FamilyUID  string `json:"family_uid,omitempty"`
	FamilyName string `json:"family_name,omitempty"`
	Index      string `json:"index,omitempty"`
}

// node is an element of the XML, kept whole so that what is not understood can
// be carried.
type node struct {
	name  string
	attrs []xml.Attr
	text  string
	kids  []*node
}

// child returns the first child of that name, or nil.
func (n *node) child(name string) *node {
	if n != nil {
		for _, k := range n.kids {
			if strings.EqualFold(k.name, name) {
				return k
			}
		}
	}
	return nil
}

// get returns the text at a path of names, "" where there is none.
func (n *node) get(path ...string) string {
	for _, name := range path {
		n = n.child(name)
	}
	if n == nil {
		return ""
	}
	return n.text
}

func (n *node) number(path ...string) int {
	v, err := strconv.ParseInt(n.get(path...), 10, 32)
	if err != nil || v < 0 {
		return 0
	}
	return int(v)
}

// set gives the child of that name this text.
func (n *node) set(name, text string) {
	k := n.child(name)
	if k == nil {
		k = &node{name: name}
		n.kids = append(n.kids, k)
	}
	k.text, k.kids = text, nil
}

// drop takes the children of these names out and returns those that were there.
func (n *node) drop(names ...string) (gone []string) {
	for _, name := range names {
		for k := 0; k < len(n.kids); {
			if strings.EqualFold(n.kids[k].name, name) {
				n.kids = append(n.kids[:k], n.kids[k+1:]...)
				gone = append(gone, name)
				continue
			}
			k++
		}
	}
	return gone
}

// clone copies the tree.
func (n *node) clone() *node {
	c := &node{name: n.name, attrs: n.attrs, text: n.text}
	for _, k := range n.kids {
		c.kids = append(c.kids, k.clone())
	}
	return c
}

// parseXML reads the elements of b up to the caps, forgiving what is not well
// formed. whole is false where something was left out. Nil: there is no element.
func parseXML(b []byte) (root *node, whole bool) {
	b = bytes.TrimRight(b, "\x00 \t\r\n")
	if k := bytes.IndexByte(b, '<'); k > 0 {
		b = b[k:] // a byte order mark
	}
	d := xml.NewDecoder(bytes.NewReader(utf8Of(b)))
	d.Strict = false
	d.CharsetReader = func(charset string, r io.Reader) (io.Reader, error) { return r, nil }
	var stack []openNode
	// pop closes the elements of the stack from k on.
	pop := func(k int) {
		for _, o := range stack[k:] {
			o.node.text = string(bytes.TrimSpace(o.text))
		}
		stack = stack[:k]
	}
	defer func() { pop(0) }()
	nodes := 0
	for range maxXMLTokens {
		token, err := d.RawToken()
		if err != nil {
			return root, err == io.EOF && len(stack) == 0
		}
		switch t := token.(type) {
		case xml.StartElement:
			if nodes++; nodes > maxXMLNodes || len(stack) == maxXMLDepth || root != nil && len(stack) == 0 {
				return root, false
			}
			n := &node{name: nameText(t.Name), attrs: t.Copy().Attr}
			if root == nil {
				root = n
			} else {
				top := stack[len(stack)-1].node
				top.kids = append(top.kids, n)
			}
			stack = append(stack, openNode{node: n})
		case xml.EndElement:
			for k := len(stack) - 1; k >= 0; k-- {
				if stack[k].node.name == nameText(t.Name) {
					pop(k)
					break
				}
			}
		case xml.CharData:
			if k := len(stack) - 1; k >= 0 {
				stack[k].text = append(stack[k].text, t...)
			}
		}
	}
	return root, false
}

// openNode is an element whose end has not come yet, with its text so far.
type openNode struct {
	node *node
	text []byte
}

func nameText(n xml.Name) string {
	if n.Space != "" {
		return n.Space + ":" + n.Local
	}
	return n.Local
}

// parseIXML reads an iXML body, or returns nil where there is no BWFXML in it.
func parseIXML(b []byte) (x *IXML, whole bool) {
	root, whole := parseXML(b)
	if root == nil || !strings.EqualFold(root.name, "BWFXML") {
		return nil, false
	}
	return viewIXML(root), whole
}

// viewIXML picks what is understood out of the tree.
func viewIXML(root *node) *IXML {
	x := &IXML{
		Project: root.get("PROJECT"), Scene: root.get("SCENE"), Take: root.get("TAKE"), Tape: root.get("TAPE"),
		Note: root.get("NOTE"), Circled: root.get("CIRCLED"), FileUID: root.get("FILE_UID"), root: root,
	}
	speed := root.child("SPEED")
	x.Speed = Speed{
		FileSampleRate: speed.number("FILE_SAMPLE_RATE"), DigitizerSampleRate: speed.number("DIGITIZER_SAMPLE_RATE"),
		BitDepth: speed.number("AUDIO_BIT_DEPTH"), TimecodeRate: speed.get("TIMECODE_RATE"), TimecodeFlag: speed.get("TIMECODE_FLAG"),
		TimestampRate: speed.number("TIMESTAMP_SAMPLE_RATE"),
	}
	low, err := strconv.ParseUint(speed.get("TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_LO"), 10, 32)
	if err == nil {
		high, err := strconv.ParseUint(speed.get("TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_HI"), 10, 31)
		if err != nil {
			high = 0
		}
		ref := int64(high<<32 | low)
		x.Speed.Timestamp = &ref
	}
	if list := root.child("TRACK_LIST"); list != nil {
		for _, t := range list.kids {
			if strings.EqualFold(t.name, "TRACK") && len(x.Tracks) < 4*MaxChannels {
				x.Tracks = append(x.Tracks, Track{Channel: t.number("CHANNEL_INDEX"), Interleave: t.number("INTERLEAVE_INDEX"),
					Name: t.get("NAME"), Function: t.get("FUNCTION")})
			}
		}
	}
	set := root.child("FILE_SET")
	x.FileSet = FileSet{TotalFiles: set.number("TOTAL_FILES"), FamilyUID: set.get("FAMILY_UID"), FamilyName: set.get("FAMILY_NAME"), Index: set.get("FILE_SET_INDEX")}
	return x
}

// body makes the chunk again.
func (x *IXML) body() []byte {
	var b bytes.Buffer
	b.WriteString("<?xml version=\"1.0\" encoding=\"UTF-8\"?>\n")
	if x.root != nil {
		x.root.write(&b, 0)
	}
	return even(b.Bytes(), '\n')
}

func (n *node) write(b *bytes.Buffer, depth int) {
	indent := strings.Repeat("\t", depth)
	escape := func(text string) {
		// EscapeText fails only where the buffer does, and that does not.
		_ = xml.EscapeText(b, []byte(text))
	}
	b.WriteString(indent + "<" + n.name)
	for _, a := range n.attrs {
		b.WriteString(" " + nameText(a.Name) + "=\"")
		escape(a.Value)
		b.WriteString("\"")
	}
	if len(n.kids) == 0 && n.text == "" {
		b.WriteString("/>\n")
		return
	}
	b.WriteString(">")
	escape(n.text)
	if len(n.kids) > 0 {
		b.WriteString("\n")
		for _, k := range n.kids {
			k.write(b, depth+1)
		}
		b.WriteString(indent)
	}
	b.WriteString("</" + n.name + ">\n")
}
