package wire

import (
	"encoding/base64"
	"mime"
	"net/url"
	"slices"
	"strings"

	"tailbell/monitor"
)

// attribute is one attribute of a CloudEvent; given is false if it is unset.
type attribute struct {
	name, value string
	isText      bool
}

// unwrap takes a message's payload out of its CloudEvent, if it is one. The
// mode is told by the headers, as the CloudEvents binding for NATS has it: the
// content type names the JSON format of CloudEvents (structured), or a header
// ce-... is there (binary).
func (d *Decoder) unwrap(r Raw) (payload, *fault) {
	bare := payload{data: r.Data, lines: true}
	if len(r.Header) == 0 {
		return bare, nil
	}
	contentType, _, f := lookup(r.Header, ContentTypeHeader)
	if f != nil {
		return payload{}, f
	}
	media := mediaType(contentType)
	if strings.HasPrefix(media, "application/cloudevents") {
		if media != "application/cloudevents+json" {
			return payload{}, refuse(monitor.BadEnvelope,
				"the content type is %q; of the forms of CloudEvents send application/cloudevents+json, one event a message", clip(media))
		}
		return d.unwrapJSON(r.Data)
	}
	attributes, f := headerAttributes(r.Header)
	if f != nil {
		return payload{}, f
	}
	if len(attributes) == 0 {
		return bare, nil
	}
	if f := checkAttributes(attributes); f != nil {
		return payload{}, f
	}
	if f := checkContentType(contentType); f != nil {
		return payload{}, f
	}
	return payload{data: r.Data, lines: true, enveloped: true}, nil
}

// mediaType returns a content type in lower case and without parameters.
func mediaType(contentType string) string {
	media, _, _ := strings.Cut(contentType, ";")
	return strings.ToLower(strings.TrimSpace(media))
}

// headerAttributes returns the attributes of a CloudEvent in binary mode.
func headerAttributes(header map[string][]string) (map[string]attribute, *fault) {
	var keys []string
	for key, values := range header {
		if len(key) > 2 && strings.EqualFold(key[:3], "ce-") && len(values) > 0 {
			keys = append(keys, key)
		}
	}
	// In order, so that the same message gives the same refusal.
	slices.Sort(keys)
	var attributes map[string]attribute
	for _, key := range keys {
		name, values := strings.ToLower(key[3:]), header[key]
		if _, twice := attributes[name]; twice || len(values) > 1 {
			return nil, refuse(monitor.BadEnvelope, "the header %q is given more than once; give it once", "ce-"+clip(name))
		}
		if attributes == nil {
			attributes = make(map[string]attribute)
		}
		value, err := url.PathUnescape(values[0])
		if err != nil {
			return nil, refuse(monitor.BadEnvelope, "the header %q has a bad percent-encoding; write %% as %%25", "ce-"+clip(name))
		}
		attributes[name] = attribute{name: name, value: value, isText: true}
	}
	return attributes, nil
}

// isEnvelope reports whether the data are a JSON object with a specversion, as
// no observation or act has one.
func isEnvelope(data []byte) bool {
	members, f := envelopeMembers(data)
	if f != nil {
		return false
	}
	for _, m := range members {
		if m.name == "specversion" {
			return true
		}
	}
	return false
}

// envelopeMembers splits an object at its commas, without a look into its
// values: a bad element in the data must not spoil the others.
func envelopeMembers(data []byte) ([]field, *fault) {
	i := skipSpace(data, 0)
	if i == len(data) || data[i] != '{' {
		return nil, refuse(monitor.BadEnvelope, "the message is no JSON object, as a CloudEvent must be")
	}
	var members []field
	i = skipSpace(data, i+1)
	for i < len(data) && (data[i] != '}' || len(members) > 0) {
		nameEnd := -1
		if data[i] == '"' {
			nameEnd = stringEnd(data, i)
		}
		colon := len(data)
		if nameEnd > 0 {
			colon = skipSpace(data, nameEnd)
		}
		if colon == len(data) || data[colon] != ':' {
			return nil, refuse(monitor.NotJSON, "at byte %d: an attribute's name in quotes and a colon are due; send valid JSON", i)
		}
		if f := checkSyntax(data[i:nameEnd], 1); f != nil {
			return nil, f
		}
		end, f := elementEnd(data, colon+1, '}')
		if f != nil {
			return nil, f
		}
		members = append(members, field{name: string(unquote(data[i:nameEnd])), value: trim(data[colon+1 : end])})
		i = end
		if data[i] == '}' {
			break
		}
		i = skipSpace(data, i+1)
	}
	if rest := skipSpace(data, min(i+1, len(data))); i >= len(data) || rest < len(data) {
		return nil, refuse(monitor.NotJSON, "the message is not exactly one JSON object; send one CloudEvent a message")
	}
	return members, nil
}

// unwrapJSON takes the payload out of a CloudEvent in structured mode.
func (d *Decoder) unwrapJSON(data []byte) (payload, *fault) {
	members, f := envelopeMembers(data)
	if f != nil {
		return payload{}, f
	}
	attributes := make(map[string]attribute, len(members))
	var inner, encoded []byte
	for _, m := range members {
		if _, twice := attributes[m.name]; twice || (m.name == "data" && inner != nil) || (m.name == "data_base64" && encoded != nil) {
			return payload{}, refuse(monitor.BadEnvelope, "the attribute %q is given twice; give it once", clip(m.name))
		}
		switch m.name {
		case "data":
			inner = m.value
		case "data_base64":
			encoded = m.value
		default:
			a, set, f := d.jsonAttribute(m)
			if f != nil {
				return payload{}, f
			}
			if set {
				attributes[m.name] = a
			}
		}
	}
	if f := checkAttributes(attributes); f != nil {
		return payload{}, f
	}
	if f := checkContentType(attributes["datacontenttype"].value); f != nil {
		return payload{}, f
	}
	switch {
	case inner != nil && encoded != nil:
		return payload{}, refuse(monitor.BadEnvelope, "data and data_base64 are given at once; give one")
	case encoded != nil:
		return d.unwrapBase64(encoded)
	case inner == nil:
		return payload{}, refuse(monitor.BadEnvelope, "there is no data; it must hold an observation or an array of them")
	}
	return payload{data: inner, enveloped: true}, nil
}

func (d *Decoder) unwrapBase64(quoted []byte) (payload, *fault) {
	if f := checkSyntax(quoted, d.limits.Depth); f != nil {
		return payload{}, f
	}
	if quoted[0] != '"' {
		return payload{}, refuse(monitor.BadEnvelope, "data_base64 is %s; it must be a text in Base64", nameOf(quoted))
	}
	inner, err := base64.StdEncoding.Strict().DecodeString(string(unquote(quoted)))
	if err != nil {
		return payload{}, refuse(monitor.BadEnvelope, "data_base64 is not Base64 (RFC 4648, section 4): %v", err)
	}
	return payload{data: inner, lines: true, enveloped: true}, nil
}

// jsonAttribute reads an attribute in structured mode. One that is null is
// unset.
func (d *Decoder) jsonAttribute(m field) (a attribute, set bool, f *fault) {
	if f := checkSyntax(m.value, d.limits.Depth); f != nil {
		return a, false, refuse(f.reason, "attribute %q: %s", clip(m.name), f.detail)
	}
	a.name = m.name
	switch c := m.value[0]; c {
	case '"':
		a.value, a.isText = string(unquote(m.value)), true
	case '{', '[':
		return a, false, refuse(monitor.BadEnvelope, "the attribute %q is %s; attributes are texts, whole numbers, true or false",
			clip(m.name), nameOf(m.value))
	case 'n':
		return a, false, nil
	default:
		a.value = string(m.value)
	}
	return a, true, nil
}

// checkAttributes holds the attributes against CloudEvents 1.0.
func checkAttributes(attributes map[string]attribute) *fault {
	for _, name := range []string{"specversion", "id", "source", "type"} {
		if a, given := attributes[name]; !given || !a.isText || a.value == "" {
			return refuse(monitor.BadEnvelope, "the attribute %s is missing or empty; CloudEvents 1.0 requires it as a text", name)
		}
	}
	if version := attributes["specversion"].value; version != "1.0" {
		return refuse(monitor.BadEnvelope, "specversion is %q; only 1.0 is understood", clip(version))
	}
	if !isReference(attributes["source"].value) {
		return refuse(monitor.BadEnvelope, "source %q is no URI reference", clip(attributes["source"].value))
	}
	for _, name := range []string{"subject", "dataschema", "time", "datacontenttype"} {
		if a, given := attributes[name]; given && (!a.isText || a.value == "") {
			return refuse(monitor.BadEnvelope, "the attribute %s is not a text or is empty; leave it out", name)
		}
	}
	if a, given := attributes["time"]; given {
		if _, ok := parseTime([]byte(a.value)); !ok {
			return refuse(monitor.BadEnvelope, "the attribute time: %s", whyNoTime(a.value))
		}
	}
	if a, given := attributes["dataschema"]; given && !isReference(a.value) {
		return refuse(monitor.BadEnvelope, "dataschema %q is no URI", clip(a.value))
	}
	return checkNames(attributes)
}

// checkNames wants names of lower-case letters and digits. Of several bad
// names the first in alphabetical order is given, so that the same message
// gives the same refusal.
func checkNames(attributes map[string]attribute) *fault {
	bad, found := "", false
	for name := range attributes {
		if !isAttributeName(name) && (!found || name < bad) {
			bad, found = name, true
		}
	}
	if found {
		return refuse(monitor.BadEnvelope, "the attribute name %q has other characters than a-z and 0-9", clip(bad))
	}
	return nil
}

func isAttributeName(name string) bool {
	for _, c := range []byte(name) {
		if c-'a' > 'z'-'a' && c-'0' > 9 {
			return false
		}
	}
	return name != ""
}

func isReference(text string) bool {
	if strings.ContainsFunc(text, func(c rune) bool { return c <= ' ' || c >= 0x7f || strings.ContainsRune(`<>"{}|\^`+"`", c) }) {
		return false
	}
	_, err := url.Parse(text)
	return err == nil
}

// checkContentType wants data that are JSON, one value or one a line.
func checkContentType(contentType string) *fault {
	if contentType == "" {
		return nil
	}
	if _, _, err := mime.ParseMediaType(contentType); err != nil {
		return refuse(monitor.BadEnvelope, "the content type %q is no media type", clip(contentType))
	}
	switch media := mediaType(contentType); {
	case media == "application/json", media == "text/json", strings.HasSuffix(media, "+json"),
		media == "application/x-ndjson", media == "application/jsonl":
		return nil
	default:
		return refuse(monitor.BadEnvelope, "the data are %q; send application/json", clip(media))
	}
}
