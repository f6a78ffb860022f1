package inspection

import (
	"strings"

	"example.com/admit/service/parttype"
)

// CheckScope refuses a part type with limits that this revision cannot judge, naming the sections: a limit is never silently left out.
func CheckScope(p *parttype.PartType) error {
	var sections []string
	if len(p.UnwantedModes) > 0 {
		sections = append(sections, "unwanted_modes")
	}
	if len(sections) > 0 {
		return Faultf(Malformed, "part_type", "%s version %d has sections that this revision does not judge: %s; want a limits file without them", p.Name, p.Version, strings.Join(sections, ", "))
	}
	return nil
}
