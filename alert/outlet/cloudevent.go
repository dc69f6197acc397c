package outlet

import (
	"encoding/json"
	"fmt"
	"strings"

	"tailbell/monitor/life"
)

// event is a CloudEvent 1.0 in structured mode.
type event struct {
	SpecVersion string    `json:"specversion"`
	ID          string    `json:"id"`
	Source      string    `json:"source"`
	Type        string    `json:"type"`
	Subject     string    `json:"subject"`
	Time        string    `json:"time"`
	ContentType string    `json:"datacontenttype"`
	Data        eventData `json:"data"`
}

// eventData is a step and the record as it stood after it, without the steps
// before: each of those was an event of its own.
type eventData struct {
	Step   life.Step   `json:"step"`
	Record life.Record `json:"record"`
}

// ContentType is the media type of a CloudEvent in structured mode.
const ContentType = "application/cloudevents+json"

// CloudEvent returns one step of an alert as a CloudEvent 1.0 in structured
// mode. Its id is the step's idempotency key: a consumer may treat an event of
// the same source and id as a repeat.
func CloudEvent(deployment string, n *life.Notice) ([]byte, error) {
	record := n.Record
	record.Steps = []life.Step{}
	data, err := json.Marshal(event{
		SpecVersion: "1.0", ID: n.Key, Source: "/tailbell/" + deployment,
		Type: Type(n.Step.Kind), Subject: n.Record.Series,
		Time:        n.Step.At.UTC().Format("2006-01-02T15:04:05.999999Z07:00"),
		ContentType: "application/json", Data: eventData{n.Step, record},
	})
	if err != nil {
		return nil, fmt.Errorf("outlet: encoding step %s: %w", n.Key, err)
	}
	return data, nil
}

// Type is the CloudEvents type of a step, such as tailbell.alert.opened.
func Type(k life.StepKind) string {
	return "tailbell.alert." + strings.ReplaceAll(string(k), " ", "_")
}
