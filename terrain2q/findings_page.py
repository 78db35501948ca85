"""The page of every error and finding, ``docs/findings.md``, made from the catalogue.

Severity, title and remedy come from :mod:`terrain2q.errors`; what it means, why it matters and an
example stand here. A code without an entry here still gets its heading, title and remedy. The page is
written anew by ``python -m terrain2q.findings_page > docs/findings.md``.
"""

from __future__ import annotations

from types import MappingProxyType

from terrain2q.errors import CATALOGUE

SEVERITY_WORDS = MappingProxyType(
    {
        "error": "error: the run stops before anything is written",
        "failed": "failed: this place gets no answer, the rest goes on",
        "doubtful": "doubtful: there is an answer; check it before you use it",
        "note": "note: good to know",
    }
)

# code: what it means, why it matters, an example.
WRITTEN: MappingProxyType[str, tuple[str, str, str]] = MappingProxyType(
    {
        "file-missing": (
            "A path in the study file or an option leads to no file or folder.",
            "Nothing can be read, and to leave an input out silently would change the answer.",
            '`dem = "dem.tif"` while the raster lies in `terrain/dem.tif`.',
        ),
        "file-unreadable": (
            "The file is there, but it cannot be opened as what it should be.",
            "A file cut short by a broken download can look whole in a file list and still miss half of "
            "the ground.",
            "A GeoTIFF of which only the first part arrived, or a spreadsheet given as CSV.",
        ),
        "study-not-toml": (
            "The study file breaks the rules of TOML, so none of it can be understood.",
            "Guessing what was meant could run another study than the one you wrote.",
            "A text without its closing quote, or a backslash path in double quotes.",
        ),
        "key-unknown": (
            "The study file, or an option, has a key that does not exist.",
            "A misspelt key would otherwise be passed over and its default used without a word.",
            "`defualt_n = 0.06` under [land_cover].",
        ),
        "key-missing": (
            "A key that has no default is not there.",
            "The job cannot be done without it, and there is no value that would be right everywhere.",
            "A study without `dem` under [terrain].",
        ),
        "key-conflict": (
            "Two keys say two different things about the same matter.",
            "Either could be the one you meant; the answers differ.",
            "Both `value` and `field` under [slope].",
        ),
        "value-not-allowed": (
            "A value has the wrong type, or is outside what the key or argument allows.",
            "The run would fail later, or succeed with something you did not intend.",
            '`units = "feet"` where `"us"` or `"si"` is expected.',
        ),
        "layer-missing": (
            "The file has no layer with the name given after `|layer=`, or has several and none is named.",
            "Another layer of the same file may hold lines too, but not the ones you meant.",
            "`data.gpkg|layer=cutlines` where the layer is called `cut_lines`.",
        ),
        "layer-empty": (
            "The layer was found and has no features in it.",
            "A filter or an export that kept nothing is the usual cause; there is no work to do on nothing.",
            'A layer of cut lines exported with "selected features only" while none was selected.',
        ),
        "geometry-kind": (
            "The features are not of the kind this input needs: lines, polygons or points.",
            "A stream given as a polygon has no direction and no stream distance.",
            "The water-surface polygons of a survey given under [streams].",
        ),
        "field-missing": (
            "A layer or a table lacks a column that is named in the study or always needed.",
            "Ids, classes, slopes and discharges are read from columns; without the column there is no "
            "value.",
            '`class_field = "landuse"` where the column is called `LANDUSE_CD`.',
        ),
        "crs-missing": (
            "The file has coordinates but does not say in which coordinate reference system.",
            "Layers can only be laid over each other, and lengths measured, when the system is known.",
            "A shapefile whose `.prj` was not sent along.",
        ),
        "crs-unknown": (
            "A coordinate reference system was given in a form that is not recognised.",
            "A wrong system can move every line by kilometres or change every length.",
            '`crs = "UTM 15"`, which names neither datum nor hemisphere.',
        ),
        "crs-local": (
            "The coordinate reference system is tied to no ellipsoid; a place in it is no place on Earth.",
            "True distances along the ground, and other layers, cannot be had from it.",
            "A site grid of a survey, with its own origin and its own north.",
        ),
        "transform-missing": (
            "The raster has no transform from its cells to the map, or only ground control points.",
            "Where each elevation belongs is then not known, or known only roughly.",
            "A raster exported as an image without its world file.",
        ),
        "elevation-unit-unknown": (
            "Neither the raster's vertical axis nor its band says whether elevations are metres or feet.",
            "Read in the wrong unit, every depth is out by a factor of 3.28. It is never guessed.",
            "A DEM in a state-plane system in feet, whose elevations may still be metres.",
        ),
        "tiles-differ": (
            "The rasters given as one terrain differ in CRS, unit of elevation or cell size.",
            "At the seam the ground would jump or be sampled from shifted cells.",
            "One tile at 1 m and its neighbour at 3 m.",
        ),
        "id-duplicate": (
            "Two features of a layer have the same value in the id field.",
            "Results are joined to features by id; with two of one name nobody can tell which is which.",
            "Two cut lines called `12` after lines were copied in a GIS.",
        ),
        "id-missing": (
            "The id field of a feature is empty.",
            "A result that cannot be named cannot be found again on the map.",
            "A cut line drawn last whose id was never filled in.",
        ),
        "class-missing": (
            "The land cover has classes for which the roughness table has no row. All of them are listed "
            "at once.",
            "There is no roughness for that ground, and an invented one would pass for a chosen one.",
            "The cover has `wetland`, the table has `wetlands`.",
        ),
        "class-duplicate": (
            "The roughness table has more than one row for a class.",
            "The rows may hold different values; which one counts would depend on their order.",
            "Two tables were pasted into one, and `pasture` is in both, with 0.035 and 0.040.",
        ),
        "section-unknown": (
            "A row of observed stages names a section that the layer of cut lines does not have.",
            "A misspelt id would leave an observation out without a word.",
            "`R-14` in the table where the cut line is called `R-014`.",
        ),
        "table-unknown": (
            "The name given is neither a file nor one of the built-in roughness tables.",
            "Without the table there is no roughness.",
            "A built-in table's name with a letter missing.",
        ),
        "library-missing": (
            "An option asks for what needs a library that does not come with the package.",
            "It is found before any section is worked on.",
            "`--scheduler` where Dask is not installed.",
        ),
        "scheduler-unreachable": (
            "--scheduler names a Dask scheduler, and nothing answers there.",
            "It is found before a section is worked on; parts that were finished earlier are kept.",
            "`--scheduler tcp://10.0.0.5:8786` before the cluster is started.",
        ),
        "number-not-positive": (
            "A roughness, a slope or a discharge is zero or negative where the equation needs a number "
            "above zero.",
            "Manning's equation divides by the roughness and takes the root of the slope.",
            "`n = 0` in a row of the roughness table that was left to be filled in.",
        ),
        "station-decreases": (
            "The stations of a section run backwards at a point.",
            "Area and perimeter are summed from left to right; a step back would count ground twice.",
            "Surveyed points that were typed in the order of the field book.",
        ),
        "profile-too-short": (
            "A section has fewer than two points, or all its points have the same station.",
            "Without width there is no area for water to flow through.",
            "A table of points that holds only its first row.",
        ),
        "number-not-finite": (
            "A number that is needed is missing, not a number, or infinite.",
            "One such number makes every sum it enters meaningless.",
            "An elevation left empty in a table of surveyed points.",
        ),
        "subareas-do-not-cover": (
            "The subareas of a section do not join end to end from its first to its last station.",
            "Ground in a gap would have no roughness; ground in an overlap would have two.",
            "Subareas 0 to 40 and 45 to 90 on a section of 90.",
        ),
        "station-outside": (
            "A station was given that lies before the section's first or after its last point.",
            "There is no ground at that place to start from.",
            "`origin=120` on a section that ends at 90.",
        ),
        "output-exists": (
            "The output folder already holds results, and the study does not allow them to be replaced.",
            "Results that took a review to accept should not vanish because a command was repeated.",
            "A second `terrain2q run` of the same study.",
        ),
        "output-not-writable": (
            "A file or the folder for results cannot be made: no permission, no room, or open in another "
            "program.",
            "It is tried before the work starts, so that hours of work are not lost at their end. An earlier "
            "result stays as it was.",
            "The output folder is on a drive mounted read-only.",
        ),
        "no-answer": (
            "What was asked has no answer for this section, such as a stage for more than it can ever carry.",
            "The nearest value that can be reached tells how far off the question is.",
            "The slope for a discharge at a stage at which the section is dry.",
        ),
        "line-empty": (
            "The row of a cut line has no geometry, or its points all lie in one place.",
            "There is no ground to sample. The row stays in the results, with empty numbers.",
            "A line deleted in a GIS whose row in the table was kept.",
        ),
        "line-not-finite": (
            "A coordinate of the cut line is not a number, or has no place in the terrain's CRS.",
            "The line cannot be laid over the terrain.",
            "A line drawn in a GIS before its layer was given a CRS, far outside the zone.",
        ),
        "line-multipart": (
            "The cut line consists of parts that do not join into one.",
            "Stations along it would jump over ground that nobody looked at.",
            "Two separate lines merged into one feature by mistake.",
        ),
        "line-parts-joined": (
            "The cut line is stored as several parts that join end to end; they were made one line.",
            "Nothing is lost. Many programs store single lines this way.",
            "A shapefile that was saved as a multipart layer.",
        ),
        "line-off-terrain": (
            "No part of the cut line has terrain under it.",
            "There is no ground to sample.",
            "A line on a stream for which the tile was not given.",
        ),
        "line-leaves-terrain": (
            "A part of the cut line runs over the edge of the terrain; the section ends there.",
            "High ground may lie beyond the edge, so water may seem to stand above the section's end too "
            "early.",
            "A line across a wide floodplain at the border of a county's lidar.",
        ),
        "gap-bridged": (
            "A few cells under the line have no elevation; the ground was taken as straight across them.",
            "A ditch or a bank in the gap does not show, so area and perimeter may be off there.",
            "A pond where the survey returned nothing.",
        ),
        "gap-ends-section": (
            "A gap in the terrain is too long to be bridged; the section ends at its edge.",
            "The ground beyond the gap counts for nothing, so the section may carry more than it seems to.",
            "A line through a lake that was masked out of the DEM.",
        ),
        "gap-at-stream": (
            "The terrain has a gap where the stream crosses the line, too long to be bridged.",
            "Without the channel's bed there is neither depth nor discharge.",
            "A DEM from which wide rivers were cut out.",
        ),
        "direction-unknown": (
            "No stream tells which side of the line is left, so it was taken as it was drawn.",
            "Left and right floodplain may be exchanged. Stage and discharge do not depend on it.",
            "A study without [streams].",
        ),
        "line-turned": (
            "The line was drawn from right to left looking downstream; its points now run the other way.",
            "Stations count from the left end, so those of a drawing of your own may differ.",
            "A line drawn from the east bank of a stream that flows north.",
        ),
        "line-misses-stream": (
            "The line crosses no stream of the layer.",
            "The section may not hold the channel at all, and has no stream distance.",
            "A line that stops on the bank, a few feet short of the stream line.",
        ),
        "line-crosses-stream-again": (
            "The line crosses its stream more than once, usually in a bend.",
            "The same water flows through the section more than once, so area and discharge are too large.",
            "A straight line across both limbs of a meander.",
        ),
        "line-crosses-streams": (
            "The line crosses streams of different names.",
            "Each carries its own flow; the section is worked out with the flow of one.",
            "A line just above a confluence that runs across the tributary too.",
        ),
        "lines-meet": (
            "Two cut lines of the same stream touch or cross. Both are named.",
            "Water cannot be at two stages in one place; at least one line is not square to the flow.",
            "Lines fanned out on the inside of a bend.",
        ),
        "line-crosses-itself": (
            "The cut line comes back over a place that it passed before.",
            "That ground is counted twice, and the water seems to flow both ways there.",
            "A line drawn freehand that makes a small loop.",
        ),
        "line-oblique": (
            "The line meets its stream at an angle far from a right one.",
            "A slanted section is wider than the flow is, so discharge is too large and stage too low.",
            "A line along a road that crosses the valley at a slant.",
        ),
        "line-ends-low": (
            "A line that was laid out ends on ground lower above the bed than [cut_lines] height asks for: "
            "it "
            "has its full width, or the terrain, another line or its own stream stopped it, or a stream's "
            "valley opens there.",
            "Water that rises above the line's end stands there against an imagined wall, and the stage "
            "comes "
            "out on the high side.",
            "Lines on a flood plain 2 km wide with a width of 1500 ft.",
        ),
        "line-moved": (
            "At the place asked for, a line square to the stream would have crossed it twice, so it stands a "
            "little up- or downstream.",
            "The stream distance of the section is that of the place where it stands.",
            "A line at the neck of a tight meander loop.",
        ),
        "line-left-out": (
            "No line could be laid out at this place: it lies off the terrain or beyond the stream's end, or "
            "other lines or streams leave it no room.",
            "There is no section here; the next ones up- and downstream stand for this reach.",
            "The last lines of a tributary, within the reach of the main stream's lines.",
        ),
        "lines-kept": (
            "The file already held lines that somebody drew or changed; they stay as they are, and lines "
            "laid out anew keep clear of them.",
            "Your work is not overwritten, and it is not corrected either.",
            "A line bent by hand around a pond, in `cut_lines.gpkg`.",
        ),
        "lines-not-used": (
            "The study asks for laid-out lines by `every`, and beside it lies a file of laid-out lines that "
            "somebody has edited.",
            "A run on `every` lays the lines out afresh, without the edits.",
            "`terrain2q layout study.toml`, an hour in a GIS, then `terrain2q run study.toml` with `every` "
            "still in the study file.",
        ),
        "stream-unusable": (
            "A row of the stream layer has no line that could be used, and was left out.",
            "Cut lines on that stream have nothing to tell direction and stream distance from.",
            "A stream whose vertices were all snapped to one place.",
        ),
        "stream-gap": (
            "The parts of one stream do not join; distances were measured straight over the gap.",
            "Stream distances below the gap are a little short where the stream bends in it.",
            "A stream line broken at a culvert.",
        ),
        "stream-parts-oppose": (
            "Two parts of one stream both start, or both end, where they meet.",
            "One of them runs upstream, so left and right are exchanged on its cut lines.",
            "A stream digitised from both ends towards a bridge.",
        ),
        "stream-turned": (
            "The ground falls against the direction in which this stream line was drawn, so it was turned.",
            "Left and right of every section, stream distances and flows that take effect at a distance "
            "depend on it.",
            "A river digitised from its mouth upwards.",
        ),
        "stream-direction-uncertain": (
            "Along this stream the ground falls too little, or too unevenly, to tell which way it flows.",
            "If the line was drawn upstream, left and right of its sections are exchanged.",
            "A ditch in a marsh, or a short line across a pond.",
        ),
        "stream-shifted": (
            "The lowest path of the ground runs beside the stream line as it was drawn.",
            "The low line is used for the stream's slope only. Cut lines are still turned and placed by "
            "the drawn line, and a line that misses the channel may find banks that are not the stream's.",
            "A stream digitised at 1:24,000 over a lidar terrain.",
        ),
        "stream-fill": (
            "Ground stands across the stream, higher than what lies upstream and downstream of it.",
            "Water gets through in a culvert or the stream line is wrong; either way it is no bed, and "
            "was left out of the slope.",
            "A road on a fill over a culvert.",
        ),
        "no-low-ground": (
            "Nowhere between its ends is the section lower than at its ends.",
            "There is no channel to hold water, so there is no stage to work out.",
            "A line drawn along a ridge.",
        ),
        "end-is-lowest": (
            "At an end of the section the ground falls away, and the lowest ground is there.",
            "Water would run out at that end; the section does not show where it goes.",
            "A line that stops halfway down to the next stream.",
        ),
        "polygon-mended": (
            "A polygon broke the rules of geometry, such as by crossing its own border, and was repaired.",
            "The repair keeps the area as drawn; a sliver may have changed its side.",
            "A land-cover polygon with a border in the shape of an eight.",
        ),
        "polygon-dropped": (
            "A polygon has no area or cannot be repaired, and was left out.",
            "Its ground counts as a gap in the layer.",
            "A polygon of two points.",
        ),
        "class-empty": (
            "Polygons of the land cover have no value in the class field.",
            "Nothing says which roughness they have, so they are treated like ground without cover.",
            "Polygons added by hand whose class was not filled in.",
        ),
        "column-ignored": (
            "A table has a column whose name is close to one that is read, but not the same.",
            "What it holds has no effect, which may not be what you intended.",
            "A column `n_hi` where `n_high` would be read.",
        ),
        "cover-gap": (
            "A part of the section has no land-cover polygon; the roughness there is `default_n`.",
            "The default may be far from what grows there, and conveyance follows it.",
            "A strip between two map sheets.",
        ),
        "cover-gap-no-default": (
            "A part of the section has no land-cover polygon, and no default roughness was given.",
            "Without a roughness there is no conveyance. The section keeps its row with empty numbers.",
            "A cut line that runs on past the edge of the land-cover map.",
        ),
        "cover-overlap": (
            "Land-cover polygons of different classes lie over each other; the higher roughness was used.",
            "The stage there is on the high side if the other class is right.",
            "A hedge drawn over a field that was not cut out.",
        ),
        "channel-not-found": (
            "The profile shows no banks by which the channel could be told from the floodplain.",
            "The channel's share and the zones are a guess; stage and discharge suffer less.",
            "A broad swale without an edge.",
        ),
        "channel-by-polygon-missing": (
            "The channel layer has no polygon on this section.",
            "The section has no zone `channel` from the layer, so the channel's own roughness is not used "
            "there.",
            "A channel polygon that ends short of the uppermost cut line.",
        ),
        "channel-in-pieces": (
            "The channel polygon meets the section in several stretches; the one at the stream was taken.",
            "The others count as floodplain, which may be right for an old arm and wrong for an island.",
            "A braided reach.",
        ),
        "channel-off-stream": (
            "The place where the stream line crosses the section is not inside the channel polygon.",
            "One of the two layers is off; water spreads from the wrong place if it is the one that is used.",
            "A stream line from an old map beside a polygon traced from a new photograph.",
        ),
        "slope-missing": (
            "The slope field of this cut line is empty.",
            "There is no normal depth without a slope. The section keeps its row with empty numbers.",
            "A line added after the slopes were worked out.",
        ),
        "slope-not-positive": (
            "The slope of this cut line is zero or negative.",
            "Manning's equation has no answer on ground that does not fall in the direction of the flow.",
            "A slope measured across a pond whose surface is level.",
        ),
        "slope-steep": (
            "The slope is steeper than the reaches on which uniform flow is usually assumed.",
            "On such slopes flow breaks into steps and pools, and takes up air; the stage is a rough guide.",
            "A mountain stream, or a slope typed in percent.",
        ),
        "slope-flat": (
            "The slope is so small that a small error in it moves the stage a lot.",
            "Discharge goes with the root of the slope, and on flat reaches backwater rules the stage.",
            "A ditch in a tidal marsh.",
        ),
        "slope-uncertain": (
            "The 90 % interval of the slope, taken from the ground along the stream, is wider than half "
            "the slope.",
            "Pools, bars and noise hide the fall over so short a stretch; a slope 25 % off moves the "
            "depth by 7 to 9 %. The interval also spans the slope over twice the window.",
            "A window of 300 ft on a stream with pools 150 ft long.",
        ),
        "water-in-channel": (
            "The lowest ground of the section is level from side to side, as a water surface is, and "
            "nothing is known of the bed below it.",
            "The water surface was taken for the bed. What flows below it is left out, so stages are on "
            "the high side, most of all at small floods. A dry bed as level as water cannot be told from "
            "it.",
            "A lidar terrain of a river, without [submerged] in the study file.",
        ),
        "bed-below-water": (
            "A bed was put below the level water of the section, as [submerged] says.",
            "Lowest ground and depth count from that bed, and z of the section there is not what the "
            "terrain shows. The message has the water's edges and level, from which the terrain's ground "
            "can be had back.",
            "A river 80 ft wide with `depth = 3.0` under [submerged].",
        ),
        "water-not-found": (
            "The study says what lies below the water, and the lowest ground of this section is not "
            "level over at least four points, as water would be.",
            "The section was left as the terrain shows it. If there was water on the survey day, its "
            "stages are on the high side.",
            "A brook 8 ft wide on a terrain of cells of 3 ft.",
        ),
        "flow-missing": (
            "No row of the flows applies to this section, its stream and its stream distance.",
            "There is no discharge to find a stage for. The section keeps its row with empty numbers.",
            "Flows given for `Mill Creek` and a section on `Mill Creek tributary`.",
        ),
        "flow-place-unknown": (
            "Rows of the flows are for a section or stream whose id no cut line or stream has. They are not"
            " used.",
            "The place that was meant gets a discharge of a more general row, or none; its stage is then"
            " that of another flow.",
            "A row for section `12` where the cut lines are `A-12`; a table of a county and a study of one of"
            " its streams.",
        ),
        "drainage-area-missing": (
            "The field with the drainage area is empty for this cut line, or holds no number above zero.",
            "A discharge is then taken as it is given, and a depth below water by drainage area cannot be"
            " had.",
            "A cut line added after the areas were filled in.",
        ),
        "drainage-area-far": (
            "The discharge was carried over from a place whose drainage area is less than half, or more "
            "than one and a half times, that of the section.",
            "The power law between discharge and area holds along one stream over a limited range (common"
            " practice: a ratio from 0.5 to 1.5).",
            "A gauge far down the river used for a headwater section.",
        ),
        "above-section-ends": (
            "The water stands higher than the ground at an end of the section.",
            "The water is held by an imagined wall without friction there, so the true stage is lower and "
            "the "
            "flooded width larger.",
            "A line drawn for the 10-year flow and used for the 500-year flow.",
        ),
        "bank-passed": (
            "At this flow the water reaches the top of a bank and runs into lower ground behind it.",
            "The hollow fills at its own stage while the channel stays at the bank's top. What leaves the "
            "channel "
            "may not come back at this section.",
            "A channel between natural levees, or a perched ditch.",
        ),
        "several-stages": (
            "More than one stage carries this discharge. All are given; the highest was taken.",
            "Conveyance falls for a while as a wide, shallow shelf goes under, when the shelf shares a "
            "subarea "
            "with deep water.",
            "One subarea that holds both the channel and the meadow beside it.",
        ),
        "supercritical": (
            "At normal depth the flow is faster than a small wave in it (Froude number above 1).",
            "Natural channels seldom hold such flow for long: it jumps to a higher stage at the next "
            "obstacle.",
            "A smooth roughness on a steep slope.",
        ),
        "velocity-high": (
            "The mean velocity of the section is above 6 m/s (about 20 ft/s).",
            "Natural beds move long before that, so slope, roughness or discharge is probably off.",
            "A slope typed as 0.5 for 0.5 percent.",
        ),
        "alpha-high": (
            "Velocities in the subareas differ so much that the coefficient alpha is above 2.",
            "Critical stage and Froude number lean on alpha, and a section like this is hardly one flow.",
            "A fast channel beside a very wide, rough and shallow floodplain.",
        ),
        "n-outside-range": (
            "The roughness of a subarea is lower or higher than the range published for its class.",
            "A reviewer's first question is where n came from; outside the range the table is no answer.",
            "Pasture with n = 0.06, where Chow (1959) gives 0.025 to 0.05.",
        ),
        "n-low-for-slope": (
            "The channel is steep and its n lies more than two standard errors below the estimate of Jarrett "
            "(1984, from memory).",
            "Steep streams lose energy over stones and steps; a low n gives a low stage and a flow that "
            "is supercritical on paper alone.",
            "A mountain stream with a slope of 3 % and n = 0.03, where such streams have about 0.09.",
        ),
        "shelf-undivided": (
            "Within one subarea a shelf at least five times as wide as it is deep lies beside water at least "
            "twice as deep.",
            "The shelf brings much wetted perimeter and little area, so that the subarea as a whole carries "
            "too little and the stage comes out too high.",
            "A floodplain in one subarea with the channel, because both have one land cover.",
        ),
        "subarea-sliver": (
            "A subarea is narrower than 1/200 of the section and holds fewer than two points of the ground.",
            "It means nothing, and each division adds a little conveyance that is not there.",
            "A strip of half a metre where the channel polygon and the land cover do not quite meet.",
        ),
        "hollow-reached": (
            "Ground on this section lies lower than the water, and the section's own ridges keep the water "
            "out; "
            "on the map water gets there from up- or downstream. It then counts in the section, at the "
            "channel's "
            "stage, and the stage is solved again.",
            "A section whose banks hold between two that spill would carry all the flow between its banks "
            "and "
            "stand too high. The message has both answers.",
            "A levee with a gap: the section crosses it where it is whole.",
        ),
        "water-rises-downstream": (
            "The water's level, as each section gives it, is higher at the lower of two neighbouring "
            "sections.",
            "Each section is worked out by itself, at normal depth. Water does not flow uphill: one of the "
            "two is "
            "out, or the lower one holds the water back and the upper one is really deeper.",
            "A narrow wooded section below a wide smooth one.",
        ),
        "extent-cut-off": (
            "Between two sections the water reaches the line that joins their ends, and would go on.",
            "Beyond it nobody has worked out a level, so the map ends there though the water may not. That "
            "part "
            "of the boundary is left out of the boundary's audit.",
            "A cut line that stops on the floodplain.",
        ),
        "extent-without-section": (
            "A section that has no answer, or that lies on no stream, does not take part in the flood "
            "extent.",
            "The water between its two neighbours is then carried over a longer way.",
            "A cut line drawn beside the stream.",
        ),
        "extent-one-section": (
            "Water is mapped between sections, and this stream has fewer than two with an answer at the "
            "event.",
            "One section says nothing of the ground up- and downstream of it.",
            "A tributary with a single cut line.",
        ),
        "elevation-unit-contradicted": (
            "The raster says one unit of elevation, the study another. The study's was used.",
            "If the study is wrong, every depth is out by a factor of 3.28.",
            '`elevation_unit = "ft"` on a raster whose band says metres.',
        ),
        "crossing-off-stream": (
            "The point of a crossing is further from every stream than the distance within which one is "
            "looked for.",
            "Without its stream there is no flow and no direction, and the nearest stream may be another "
            "valley's.",
            "A culvert of a field ditch that the stream layer does not hold.",
        ),
        "crossings-none": (
            "No road of the study meets any of its streams, so there is nothing to screen.",
            "An empty list of crossings looks like a safe one.",
            "Roads of the county to the south, or a layer whose CRS was assigned wrongly and lies elsewhere.",
        ),
        "crossing-unknown": (
            "A row of the flows is meant for one crossing, and there is no crossing of that id.",
            "The crossing that was meant is then held against the flow of its stream, or has none.",
            "`C-12` in the flows and `C12` in the layer of crossings.",
        ),
        "crossings-merged": (
            "Crossings lie nearer to each other than the merge distance and are counted as one.",
            "A divided road has one opening under two carriageways; two rows would count it twice.",
            "The two carriageways of a highway, 18 m apart.",
        ),
        "road-grazes-stream": (
            "A road meets a stream several times without getting away from it in between, or at a very "
            "small angle.",
            "Lines drawn a few metres off make ten crossings of a road that only runs beside the stream.",
            "A valley road that touches the outside of three bends.",
        ),
        "road-in-tunnel": (
            "A field says that the road is in a tunnel where its line meets the stream.",
            "There is no crest there that water could pass. A crossing that comes from a point keeps its "
            "row, without "
            "an answer.",
            "`tunnel = yes` on a road line under a canal.",
        ),
        "road-line-missing": (
            "Only the point of the crossing is known. The road was taken to run straight along the highest "
            "ground "
            "across the stream.",
            "Where the ground shows no fill, the direction is a guess, and the crest with it.",
            "A list of culverts with coordinates, and no road layer.",
        ),
        "deck-bridged": (
            "Along the road the ground dips at the stream with sides steeper than a road's: the deck was "
            "taken out of "
            "the ground model. The road's height was taken straight between the tops of the abutments.",
            "The ground under the deck is metres lower than the road. Taken for the crest, it would flood "
            "every bridge.",
            "A bridge of 24 m whose deck is missing, with a dip of 2.6 m. A ford between steep banks looks "
            "the same.",
        ),
        "crest-doubtful": (
            "The road does not stand out well: it is uneven, slopes across, is narrower than the cells, or "
            "lies hardly above the bed. Or higher ground closes the valley beside it where no road is drawn: "
            "the road's line may be far off.",
            "The discharge that reaches the crest goes with more than its square; a foot of error decides "
            "the verdict.",
            "A farm track on 3 m cells.",
        ),
        "crest-at-end": (
            "The lowest point of the road within reach is where the search ends, and the road falls "
            "towards it.",
            "The water may pass the road beyond, at a lower level than the one given.",
            "A road that runs down the valley after it has crossed the stream.",
        ),
        "crest-survey-differs": (
            "The surveyed crest and the road in the ground are more than 0.3 m (1 ft) apart. The surveyed "
            "one was used, unless it is no higher than the stream's bed, as a filler such as -9999 is.",
            "Most such differences are a datum or a unit; some are a road rebuilt since the flight.",
            "A crest surveyed in the datum of 1929 beside a terrain in that of 1988.",
        ),
        "field-not-number": (
            "A field that the study names for a number (crest, opening, slope, rank) holds text, or a number "
            "that cannot be one of its kind, at this crossing.",
            "Left out without a word, a surveyed crest would give way to the ground, and a crossing would "
            "lose its place in the rank.",
            "`498.2 ft` in the field of the surveyed crest, or `1,200` in that of the traffic.",
        ),
        "overflow-aside": (
            "The road's low point that water can get to is not at the stream.",
            "The road is closed there first, and the water leaves its valley there.",
            "A road 1.3 m lower 120 m from its bridge.",
        ),
        "section-cut-by-road": (
            "No line square to the stream within the search is clear of the fills of roads over the width it "
            "needs. The section ends at the fill; or, where other roads leave no room at all, it runs over "
            "theirs.",
            "A section narrower than the valley has a stage too high; one over a fill has too little room.",
            "A road that crosses a wide floodplain at a small angle.",
        ),
        "no-opening-passes": (
            "Even the whole width of the approach section does not pass the event with the stage below the "
            "crest less "
            "the freeboard.",
            "The road, not its opening, is too low for the event.",
            "A lane half a metre above the floodplain.",
        ),
        "weir-drowned": (
            "The stage of uniform flow below the road stands above its crest too.",
            "A drowned weir passes less than C L H^1.5, down to nothing when both sides stand alike.",
            "A low road across a flat floodplain at the 100-year flow.",
        ),
        "backwater": (
            "Downstream the ground is level as only water is, at a height that matters here, or a larger "
            "stream is "
            "joined nearby and hardly lower.",
            "Uniform flow knows nothing of it; the true stage is higher.",
            "A road 200 m above a lake.",
        ),
        "culvert-ponds": (
            "The fill is whole and high, and there is room behind it below its crest.",
            "A culvert too small for the flow ponds water up to the crest; with much room behind it, the "
            "flood's peak "
            "passes before the crest is reached.",
            "A fill 6 m high over a pipe of 1.2 m.",
        ),
        "tidal": (
            "The field named by `tide_field` says that the tide reaches the crossing.",
            "At high tide the stage is the sea's.",
            "A road over a creek behind a beach.",
        ),
        "crossing-failed": (
            "No answer was found for this crossing; the message says what was missing. It keeps its row.",
            "One bad crossing stops nothing else.",
            "A crossing outside the terrain.",
        ),
        "bench-not-possible": (
            "At this section the bench's base is not below the stage that the water may reach, or no top of "
            "bank is known to stay below.",
            "A bench above the water carries nothing, so there is no width to find.",
            "`base = 6.0` where the lower top of bank is 5.2 ft above the lowest ground.",
        ),
        "width-not-enough": (
            "Even the widest bench whose outer slope still meets the ground within the section does not pass "
            "the flow at the allowed stage.",
            "The section as drawn cannot be widened enough. The message has the most that can pass.",
            "A cut line that ends 30 m from the channel, with a flow that needs a bench of 60 m.",
        ),
        "width-at-jump": (
            "The discharge at the allowed stage jumps as the bench grows past this width: it opens a hollow, "
            "passes a vertical face, or, at a width of next to nothing, divides the section at the bank.",
            "The width has no room for error: a little less passes clearly less.",
            "A bench that breaks through a levee into low ground behind it.",
        ),
        "observation-no-answer": (
            "At the observed stage no roughness above zero gives the observed discharge.",
            "The observation and the section contradict each other: the stage lies below the ground, the "
            "floodplain alone carries more, or the place is wrong.",
            "A high-water mark below the channel's lowest ground.",
        ),
        "section-failed": (
            "Something unforeseen went wrong on this section; the message says what.",
            "The section keeps its row with empty numbers, and the rest of the run is not affected.",
            "A profile with a shape that no test had.",
        ),
    }
)


def findings_page() -> str:
    """Return the page ``docs/findings.md``: one heading for each code of the catalogue, in its order."""
    lines = [
        "# Errors and findings",
        "",
        "Every message carries one of these codes. An error stops the run before anything is written; a "
        "finding",
        "is about one place, stands in the layer `findings` of the results, and lets the rest go on. What "
        "the",
        "message says of the place at hand, with its numbers, comes first; this page gives the background.",
        "",
        "This page is written by `python -m terrain2q.findings_page > docs/findings.md`.",
    ]
    for code, kind in CATALOGUE.items():
        lines += ["", f"## {code}", "", f"{kind.title}. ({SEVERITY_WORDS[kind.severity]})", ""]
        if code in WRITTEN:
            means, why, example = WRITTEN[code]
            lines += [f"**What it means.** {means}", "", f"**Why it matters.** {why}", ""]
            lines += [f"**Example.** {example}", ""]
        lines += [f"**Do this.** {kind.remedy}"]
    return "\n".join(lines) + "\n"


if __name__ == "__main__":
    print(findings_page(), end="")
