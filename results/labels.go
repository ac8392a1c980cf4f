package results

import (
	"proofrate/results/recording"
)

// told gives labels as programs read them, {"temperature": "23 degC", "temperature visit": 2}, and in words.
func told(list []recording.LabelJSON) (map[string]any, string) {
	labels := map[string]any{}
	read, err := recording.LabelsFrom(list)
	if err != nil {
		return labels, ""
	}
	for _, l := range read {
		labels[l.Name] = l.Value.String()
		if l.Visit > 0 {
			labels[l.Name+" visit"] = l.Visit
		}
	}
	return labels, read.String()
}
