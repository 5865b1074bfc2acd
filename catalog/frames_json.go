package catalog

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
)

// MarshalJSON writes the record as an object with the names of the columns in
// their order, then "inputs" and "footprint". Unknown numbers (NaN, and infinities) and empty
// texts are null. UnmarshalJSON gives the same record back.
func (r FrameRecord) MarshalJSON() ([]byte, error) {
	var b bytes.Buffer
	b.WriteByte('{')
	for i := range frameColumns {
		value := frameColumns[i].value(&r)
		if x, ok := value.(float64); ok && math.IsInf(x, 0) {
			value = nil
		}
		v, err := json.Marshal(value)
		if err != nil {
			return nil, fmt.Errorf("frames.%s: %w", frameColumns[i].Name, err)
		}
		fmt.Fprintf(&b, "%q:%s,", frameColumns[i].Name, v)
	}
	inputs, err := json.Marshal(r.Inputs)
	if err != nil {
		return nil, err
	}
	footprint, err := json.Marshal(r.Footprint)
	if err != nil {
		return nil, err
	}
	fmt.Fprintf(&b, "%q:%s,%q:%s}", "inputs", inputs, "footprint", footprint)
	return b.Bytes(), nil
}

// UnmarshalJSON reads what MarshalJSON writes. A column that is missing stays
// unknown.
func (r *FrameRecord) UnmarshalJSON(data []byte) error {
	var raw map[string]json.RawMessage
	if err := json.Unmarshal(data, &raw); err != nil {
		return err
	}
	*r = NewFrameRecord("", "")
	for i := range frameColumns {
		c := &frameColumns[i]
		v, ok := raw[c.Name]
		if !ok || string(v) == "null" {
			continue
		}
		var err error
		switch {
		case c.text != nil:
			err = json.Unmarshal(v, c.text(r))
		case c.real != nil:
			err = json.Unmarshal(v, c.real(r))
		default:
			err = json.Unmarshal(v, c.num(r))
		}
		if err != nil {
			return fmt.Errorf("frames.%s: %w", c.Name, err)
		}
	}
	if v, ok := raw["inputs"]; ok {
		if err := json.Unmarshal(v, &r.Inputs); err != nil {
			return fmt.Errorf("inputs: %w", err)
		}
	}
	if v, ok := raw["footprint"]; ok {
		if err := json.Unmarshal(v, &r.Footprint); err != nil {
			return fmt.Errorf("footprint: %w", err)
		}
	}
	return nil
}
