# The public names, for type checkers.

from profileplan.checks import (
    Finding as Finding,
)
from profileplan.checks import (
    check as check,
)
from profileplan.checks import (
    check_table as check_table,
)
from profileplan.dynamics import (
    AxisLoad as AxisLoad,
)
from profileplan.dynamics import (
    forces as forces,
)
from profileplan.dynamics import (
    loads as loads,
)
from profileplan.dynamics import (
    torques as torques,
)
from profileplan.errors import (
    Fault as Fault,
)
from profileplan.errors import (
    InputError as InputError,
)
from profileplan.errors import (
    PlanError as PlanError,
)
from profileplan.errors import (
    ProfileplanError as ProfileplanError,
)
from profileplan.inputs import (
    Axis as Axis,
)
from profileplan.inputs import (
    Circle as Circle,
)
from profileplan.inputs import (
    Cycle as Cycle,
)
from profileplan.inputs import (
    Job as Job,
)
from profileplan.inputs import (
    Keepout as Keepout,
)
from profileplan.inputs import (
    Line as Line,
)
from profileplan.inputs import (
    Machine as Machine,
)
from profileplan.inputs import (
    Mechanics as Mechanics,
)
from profileplan.inputs import (
    Motor as Motor,
)
from profileplan.inputs import (
    Move as Move,
)
from profileplan.inputs import (
    Part as Part,
)
from profileplan.inputs import (
    PathStep as PathStep,
)
from profileplan.inputs import (
    Pattern as Pattern,
)
from profileplan.inputs import (
    Payload as Payload,
)
from profileplan.inputs import (
    Place as Place,
)
from profileplan.inputs import (
    SetpointSettings as SetpointSettings,
)
from profileplan.inputs import (
    Signal as Signal,
)
from profileplan.inputs import (
    Tool as Tool,
)
from profileplan.inputs import (
    Trace as Trace,
)
from profileplan.inputs import (
    Transfer as Transfer,
)
from profileplan.inputs import (
    Wait as Wait,
)
from profileplan.inputs import (
    Waypoint as Waypoint,
)
from profileplan.inputs import (
    expand as expand,
)
from profileplan.inputs import (
    load_job as load_job,
)
from profileplan.inputs import (
    read_cycle as read_cycle,
)
from profileplan.inputs import (
    read_machine as read_machine,
)
from profileplan.inputs import (
    read_waypoints as read_waypoints,
)
from profileplan.motion.laws import (
    LAWS as LAWS,
)
from profileplan.motion.laws import (
    Law as Law,
)
from profileplan.motion.laws import (
    Limits as Limits,
)
from profileplan.motion.laws import (
    Moves as Moves,
)
from profileplan.motion.trajectory import (
    Trajectory as Trajectory,
)
from profileplan.planning import (
    Lever as Lever,
)
from profileplan.planning import (
    Limit as Limit,
)
from profileplan.planning import (
    Plan as Plan,
)
from profileplan.planning import (
    PlannedStep as PlannedStep,
)
from profileplan.planning import (
    plan as plan,
)
from profileplan.setpoints import (
    SetpointTable as SetpointTable,
)
from profileplan.setpoints import (
    read_csv as read_csv,
)
from profileplan.setpoints import (
    sample as sample,
)
from profileplan.setpoints import (
    write_csv as write_csv,
)
from profileplan.summary import (
    summarise as summarise,
)

__version__: str
