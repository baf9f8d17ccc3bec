!> Posts snapshots of a running solver to a Slackwater service and says whether the run may stop.
!!
!!     type(slackwater_run) :: run
!!     character(len=:), allocatable :: error
!!     call run%declare(declaration, error)
!!     if (len(error) > 0) print '(a)', 'going on without a service: ' // error
!!     do step = 1, n_steps
!!         call advance()
!!         if (mod(step, 20) == 0) call run%post(time, u, v)
!!         if (run%may_stop()) exit
!!     end do
!!     call run%close(error)
!!
!! Fortran 2008 over the C client, whose header (clients/c/slackwater.h) says what is promised: a post holds the solver
!! up for one copy of the snapshot, the service never ends the solver, and a run that could not be had does nothing and
!! advises to go on. Fields are arrays of rank 1 to 3, real32 or real64, one argument for each of up to four declared
!! fields, or one array that holds all fields one after another. Points are counted as they lie in memory, first index
!! fastest: an array (nx, ny) belongs to a grid of shape [ny, nx] in the declaration.
module slackwater
    use, intrinsic :: iso_c_binding, only: c_char, c_double, c_f_pointer, c_funptr, c_int, c_loc, c_long_long, &
        c_null_char, c_null_funptr, c_null_ptr, c_ptr, c_size_t, c_associated
    use, intrinsic :: iso_fortran_env, only: int64, real32, real64
    use, intrinsic :: ieee_arithmetic, only: ieee_quiet_nan, ieee_value
    implicit none
    private
    public :: slackwater_run, slackwater_settings, slackwater_state, slackwater_no_time

    integer, parameter :: text_bytes = 512, verdict_bytes = 16, max_fields = 4

    !> What posts, close and detach give; the meaning is that of slackwater.h.
    integer, parameter, public :: slackwater_ok = 0, slackwater_no_run = 1, slackwater_skipped = 2
    integer, parameter, public :: slackwater_misfit = 3, slackwater_lost = 4, slackwater_stopped = 5
    integer, parameter, public :: slackwater_refused = 6, slackwater_no_answer = 7, slackwater_unsent = 8

    !> How to reach the service and how much to hold; zero or unallocated takes the default of the C client.
    type :: slackwater_settings
        character(len=:), allocatable :: url, token
        integer(int64) :: batch_snapshots = 0, max_waiting_bytes = 0
        real(real64) :: hold_seconds = 0, start_seconds = 0, idle_seconds = 0, flush_seconds = 0
    end type slackwater_settings

    !> How far a run has come, as seen from here.
    type :: slackwater_state
        integer(int64) :: sent_snapshots = 0, waiting_snapshots = 0, lost_snapshots = 0, skipped_snapshots = 0
        integer(int64) :: held_snapshots = 0, snapshots_to_go = -1
        logical :: in_contact = .false.
        character(len=:), allocatable :: verdict, last_error
    end type slackwater_state

    !> One run. Do not copy it: two copies would let the same run go twice.
    type :: slackwater_run
        private
        type(c_ptr) :: handle = c_null_ptr
    contains
        procedure, public :: declare => declare_run
        procedure, public :: attach => attach_run
        procedure, public :: run_id
        procedure, public :: put_weights
        procedure, public :: put_positions
        procedure, public :: may_stop
        procedure, public :: read_state
        procedure, public :: detach => detach_run
        procedure, public :: close => close_run
        generic, public :: post => post_real32_1, post_real32_2, post_real32_3, post_real64_1, post_real64_2, &
            post_real64_3
        procedure, private :: post_real32_1, post_real32_2, post_real32_3, post_real64_1, post_real64_2, post_real64_3
    end type slackwater_run

    type, bind(c) :: c_settings
        type(c_ptr) :: url = c_null_ptr, token = c_null_ptr
        integer(c_size_t) :: batch_snapshots = 0, max_waiting_bytes = 0
        real(c_double) :: hold_seconds = 0, start_seconds = 0, idle_seconds = 0, flush_seconds = 0
        type(c_funptr) :: tell = c_null_funptr
        type(c_ptr) :: context = c_null_ptr
    end type c_settings

    type, bind(c) :: c_state
        integer(c_long_long) :: sent, waiting, lost, skipped, held, to_go
        integer(c_int) :: in_contact
        character(kind=c_char) :: verdict(verdict_bytes), last_error(text_bytes)
    end type c_state

    !> Addresses of the fields of one snapshot.
    type :: field_list
        type(c_ptr) :: fields(max_fields) = c_null_ptr
        integer(c_size_t) :: n_fields = 0, n_points = 0
    end type field_list

    interface
        function c_declare(settings, declaration, error) bind(c, name='slackwater_declare') result(run)
            import :: c_ptr, c_settings, c_char
            type(c_settings), intent(in) :: settings
            character(kind=c_char), intent(in) :: declaration(*)
            character(kind=c_char), intent(out) :: error(*)
            type(c_ptr) :: run
        end function c_declare

        function c_attach(settings, run_id, error) bind(c, name='slackwater_attach') result(run)
            import :: c_ptr, c_settings, c_char
            type(c_settings), intent(in) :: settings
            character(kind=c_char), intent(in) :: run_id(*)
            character(kind=c_char), intent(out) :: error(*)
            type(c_ptr) :: run
        end function c_attach

        function c_run_id(run) bind(c, name='slackwater_run_id') result(text)
            import :: c_ptr
            type(c_ptr), value :: run
            type(c_ptr) :: text
        end function c_run_id

        function c_put_weights(run, weights, n, error) bind(c, name='slackwater_put_weights') result(outcome)
            import :: c_ptr, c_size_t, c_double, c_char, c_int
            type(c_ptr), value :: run
            real(c_double), intent(in) :: weights(*)
            integer(c_size_t), value :: n
            character(kind=c_char), intent(out) :: error(*)
            integer(c_int) :: outcome
        end function c_put_weights

        function c_put_positions(run, positions, n_points, n_axes, error) bind(c, name='slackwater_put_positions') &
                result(outcome)
            import :: c_ptr, c_size_t, c_double, c_char, c_int
            type(c_ptr), value :: run
            real(c_double), intent(in) :: positions(*)
            integer(c_size_t), value :: n_points, n_axes
            character(kind=c_char), intent(out) :: error(*)
            integer(c_int) :: outcome
        end function c_put_positions

        function c_post_float(run, time, fields, n_fields, n_points) bind(c, name='slackwater_post_float') &
                result(outcome)
            import :: c_ptr, c_size_t, c_double, c_int
            type(c_ptr), value :: run
            real(c_double), value :: time
            type(c_ptr), intent(in) :: fields(*)
            integer(c_size_t), value :: n_fields, n_points
            integer(c_int) :: outcome
        end function c_post_float

        function c_post_double(run, time, fields, n_fields, n_points) bind(c, name='slackwater_post_double') &
                result(outcome)
            import :: c_ptr, c_size_t, c_double, c_int
            type(c_ptr), value :: run
            real(c_double), value :: time
            type(c_ptr), intent(in) :: fields(*)
            integer(c_size_t), value :: n_fields, n_points
            integer(c_int) :: outcome
        end function c_post_double

        function c_advise(run) bind(c, name='slackwater_advise') result(advice)
            import :: c_ptr, c_int
            type(c_ptr), value :: run
            integer(c_int) :: advice
        end function c_advise

        subroutine c_read_state(run, state) bind(c, name='slackwater_read_state')
            import :: c_ptr, c_state
            type(c_ptr), value :: run
            type(c_state), intent(out) :: state
        end subroutine c_read_state

        function c_detach(run, state, error) bind(c, name='slackwater_detach') result(outcome)
            import :: c_ptr, c_state, c_char, c_int
            type(c_ptr), value :: run
            type(c_state), intent(out) :: state
            character(kind=c_char), intent(out) :: error(*)
            integer(c_int) :: outcome
        end function c_detach

        function c_close(run, state, error) bind(c, name='slackwater_close') result(outcome)
            import :: c_ptr, c_state, c_char, c_int
            type(c_ptr), value :: run
            type(c_state), intent(out) :: state
            character(kind=c_char), intent(out) :: error(*)
            integer(c_int) :: outcome
        end function c_close

        function c_strlen(text) bind(c, name='strlen') result(n)
            import :: c_ptr, c_size_t
            type(c_ptr), value :: text
            integer(c_size_t) :: n
        end function c_strlen
    end interface

contains

    !> The time of posts when the declared step holds.
    function slackwater_no_time() result(time)
        real(real64) :: time
        time = ieee_value(time, ieee_quiet_nan)
    end function slackwater_no_time

    !> Declare a run with the JSON of POST /v1/runs; `error` is empty when the service has taken it.
    subroutine declare_run(self, declaration, error, settings)
        class(slackwater_run), intent(inout) :: self
        character(len=*), intent(in) :: declaration
        character(len=:), allocatable, intent(out) :: error
        type(slackwater_settings), intent(in), optional :: settings
        call start(self, declaration, .true., error, settings)
    end subroutine declare_run

    !> Take up a run that exists, as after a restart of the solver; `error` is empty when the service has it.
    subroutine attach_run(self, id, error, settings)
        class(slackwater_run), intent(inout) :: self
        character(len=*), intent(in) :: id
        character(len=:), allocatable, intent(out) :: error
        type(slackwater_settings), intent(in), optional :: settings
        call start(self, id, .false., error, settings)
    end subroutine attach_run

    subroutine start(self, words, is_new, error, settings)
        class(slackwater_run), intent(inout) :: self
        character(len=*), intent(in) :: words
        logical, intent(in) :: is_new
        character(len=:), allocatable, intent(out) :: error
        type(slackwater_settings), intent(in), optional :: settings
        character(kind=c_char) :: text(text_bytes)
        character(len=:), allocatable, target :: url, token
        type(c_settings) :: given
        if (c_associated(self%handle)) then
            error = 'this run is in use; close or detach it first'
            return
        end if
        if (present(settings)) then
            given%batch_snapshots = settings%batch_snapshots
            given%max_waiting_bytes = settings%max_waiting_bytes
            given%hold_seconds = settings%hold_seconds
            given%start_seconds = settings%start_seconds
            given%idle_seconds = settings%idle_seconds
            given%flush_seconds = settings%flush_seconds
            if (allocated(settings%url)) url = trim(settings%url) // c_null_char
            if (allocated(settings%token)) token = trim(settings%token) // c_null_char
            if (allocated(url)) given%url = c_loc(url)
            if (allocated(token)) given%token = c_loc(token)
        end if
        if (is_new) then
            self%handle = c_declare(given, trim(words) // c_null_char, text)
        else
            self%handle = c_attach(given, trim(words) // c_null_char, text)
        end if
        error = plain(text)
    end subroutine start

    !> The id of the run, for `attach` and for people; empty without a run.
    function run_id(self) result(id)
        class(slackwater_run), intent(in) :: self
        character(len=:), allocatable :: id
        character(kind=c_char), pointer :: text(:)
        type(c_ptr) :: at
        at = c_run_id(self%handle)
        call c_f_pointer(at, text, [c_strlen(at) + 1])
        id = plain(text)
    end function run_id

    !> Give weights (cell volume or area), for each point or for each field and point, before the first post.
    subroutine put_weights(self, weights, error)
        class(slackwater_run), intent(in) :: self
        real(real64), intent(in), contiguous :: weights(:)
        character(len=:), allocatable, intent(out) :: error
        character(kind=c_char) :: text(text_bytes)
        integer(c_int) :: outcome
        text(1) = c_null_char
        outcome = c_put_weights(self%handle, weights, size(weights, kind=c_size_t), text)
        error = plain(text)
        if (outcome == slackwater_ok) error = ''
    end subroutine put_weights

    !> Give the positions of scattered points, (n_axes, n_points), before the first post.
    subroutine put_positions(self, positions, error)
        class(slackwater_run), intent(in) :: self
        real(real64), intent(in), contiguous :: positions(:, :)
        character(len=:), allocatable, intent(out) :: error
        character(kind=c_char) :: text(text_bytes)
        integer(c_int) :: outcome
        integer(c_size_t) :: n(2)
        text(1) = c_null_char
        n = shape(positions, c_size_t)
        outcome = c_put_positions(self%handle, positions, n(2), n(1), text)
        error = plain(text)
        if (outcome == slackwater_ok) error = ''
    end subroutine put_positions

    !> True when the modes have settled; false before the first receipt, out of contact, and without a run.
    function may_stop(self) result(yes)
        class(slackwater_run), intent(in) :: self
        logical :: yes
        yes = c_advise(self%handle) == 1
    end function may_stop

    !> How far the run has come; also says why posts fail.
    subroutine read_state(self, state)
        class(slackwater_run), intent(in) :: self
        type(slackwater_state), intent(out) :: state
        type(c_state) :: given
        call c_read_state(self%handle, given)
        call take_state(given, state)
    end subroutine read_state

    !> Send what is left and let the run go; it stays open. `error` is empty, or says what could not be sent.
    subroutine detach_run(self, error, state)
        class(slackwater_run), intent(inout) :: self
        character(len=:), allocatable, intent(out) :: error
        type(slackwater_state), intent(out), optional :: state
        character(kind=c_char) :: text(text_bytes)
        integer(c_int) :: outcome
        type(c_state) :: last
        outcome = c_detach(self%handle, last, text)
        call let_go(self, outcome, last, text, error, state)
    end subroutine detach_run

    !> As `detach`, and tell the service that no more data will come.
    subroutine close_run(self, error, state)
        class(slackwater_run), intent(inout) :: self
        character(len=:), allocatable, intent(out) :: error
        type(slackwater_state), intent(out), optional :: state
        character(kind=c_char) :: text(text_bytes)
        integer(c_int) :: outcome
        type(c_state) :: last
        outcome = c_close(self%handle, last, text)
        call let_go(self, outcome, last, text, error, state)
    end subroutine close_run

    subroutine let_go(self, outcome, last, text, error, state)
        class(slackwater_run), intent(inout) :: self
        integer(c_int), intent(in) :: outcome
        type(c_state), intent(in) :: last
        character(kind=c_char), intent(in) :: text(:)
        character(len=:), allocatable, intent(out) :: error
        type(slackwater_state), intent(out), optional :: state
        self%handle = c_null_ptr
        error = plain(text)
        if (outcome == slackwater_ok) error = ''
        if (present(state)) call take_state(last, state)
    end subroutine let_go

    subroutine take_state(given, state)
        type(c_state), intent(in) :: given
        type(slackwater_state), intent(out) :: state
        state%sent_snapshots = given%sent
        state%waiting_snapshots = given%waiting
        state%lost_snapshots = given%lost
        state%skipped_snapshots = given%skipped
        state%held_snapshots = given%held
        state%snapshots_to_go = given%to_go
        state%in_contact = given%in_contact /= 0
        state%verdict = plain(given%verdict)
        state%last_error = plain(given%last_error)
    end subroutine take_state

    !> Characters up to the first zero.
    pure function plain(text) result(words)
        character(kind=c_char), intent(in) :: text(:)
        character(len=:), allocatable :: words
        integer :: k, n
        do n = 0, size(text) - 1
            if (text(n + 1) == c_null_char) exit
        end do
        allocate (character(len=n) :: words)
        do k = 1, n
            words(k:k) = text(k)
        end do
    end function plain

    !> Note one field of a snapshot; fields of unequal size make a snapshot that fits no run.
    subroutine add(list, field, n_points)
        type(field_list), intent(inout) :: list
        type(c_ptr), intent(in) :: field
        integer(c_size_t), intent(in) :: n_points
        if (list%n_fields == 0) list%n_points = n_points
        if (list%n_points /= n_points) list%n_points = 0
        list%n_fields = list%n_fields + 1
        list%fields(list%n_fields) = field
    end subroutine add

    subroutine post_real32_1(self, time, a, b, c, d, outcome)
        class(slackwater_run), intent(in) :: self
        real(real64), intent(in) :: time
        real(real32), intent(in), contiguous, target :: a(:)
        real(real32), intent(in), contiguous, target, optional :: b(:), c(:), d(:)
        integer, intent(out), optional :: outcome
        type(field_list) :: list
        integer(c_int) :: given
        call add(list, c_loc(a), size(a, kind=c_size_t))
        if (present(b)) call add(list, c_loc(b), size(b, kind=c_size_t))
        if (present(c)) call add(list, c_loc(c), size(c, kind=c_size_t))
        if (present(d)) call add(list, c_loc(d), size(d, kind=c_size_t))
        given = c_post_float(self%handle, time, list%fields, list%n_fields, list%n_points)
        if (present(outcome)) outcome = given
    end subroutine post_real32_1

    subroutine post_real32_2(self, time, a, b, c, d, outcome)
        class(slackwater_run), intent(in) :: self
        real(real64), intent(in) :: time
        real(real32), intent(in), contiguous, target :: a(:, :)
        real(real32), intent(in), contiguous, target, optional :: b(:, :), c(:, :), d(:, :)
        integer, intent(out), optional :: outcome
        type(field_list) :: list
        integer(c_int) :: given
        call add(list, c_loc(a), size(a, kind=c_size_t))
        if (present(b)) call add(list, c_loc(b), size(b, kind=c_size_t))
        if (present(c)) call add(list, c_loc(c), size(c, kind=c_size_t))
        if (present(d)) call add(list, c_loc(d), size(d, kind=c_size_t))
        given = c_post_float(self%handle, time, list%fields, list%n_fields, list%n_points)
        if (present(outcome)) outcome = given
    end subroutine post_real32_2

    subroutine post_real32_3(self, time, a, b, c, d, outcome)
        class(slackwater_run), intent(in) :: self
        real(real64), intent(in) :: time
        real(real32), intent(in), contiguous, target :: a(:, :, :)
        real(real32), intent(in), contiguous, target, optional :: b(:, :, :), c(:, :, :), d(:, :, :)
        integer, intent(out), optional :: outcome
        type(field_list) :: list
        integer(c_int) :: given
        call add(list, c_loc(a), size(a, kind=c_size_t))
        if (present(b)) call add(list, c_loc(b), size(b, kind=c_size_t))
        if (present(c)) call add(list, c_loc(c), size(c, kind=c_size_t))
        if (present(d)) call add(list, c_loc(d), size(d, kind=c_size_t))
        given = c_post_float(self%handle, time, list%fields, list%n_fields, list%n_points)
        if (present(outcome)) outcome = given
    end subroutine post_real32_3

    subroutine post_real64_1(self, time, a, b, c, d, outcome)
        class(slackwater_run), intent(in) :: self
        real(real64), intent(in) :: time
        real(real64), intent(in), contiguous, target :: a(:)
        real(real64), intent(in), contiguous, target, optional :: b(:), c(:), d(:)
        integer, intent(out), optional :: outcome
        type(field_list) :: list
        integer(c_int) :: given
        call add(list, c_loc(a), size(a, kind=c_size_t))
        if (present(b)) call add(list, c_loc(b), size(b, kind=c_size_t))
        if (present(c)) call add(list, c_loc(c), size(c, kind=c_size_t))
        if (present(d)) call add(list, c_loc(d), size(d, kind=c_size_t))
        given = c_post_double(self%handle, time, list%fields, list%n_fields, list%n_points)
        if (present(outcome)) outcome = given
    end subroutine post_real64_1

    subroutine post_real64_2(self, time, a, b, c, d, outcome)
        class(slackwater_run), intent(in) :: self
        real(real64), intent(in) :: time
        real(real64), intent(in), contiguous, target :: a(:, :)
        real(real64), intent(in), contiguous, target, optional :: b(:, :), c(:, :), d(:, :)
        integer, intent(out), optional :: outcome
        type(field_list) :: list
        integer(c_int) :: given
        call add(list, c_loc(a), size(a, kind=c_size_t))
        if (present(b)) call add(list, c_loc(b), size(b, kind=c_size_t))
        if (present(c)) call add(list, c_loc(c), size(c, kind=c_size_t))
        if (present(d)) call add(list, c_loc(d), size(d, kind=c_size_t))
        given = c_post_double(self%handle, time, list%fields, list%n_fields, list%n_points)
        if (present(outcome)) outcome = given
    end subroutine post_real64_2

    subroutine post_real64_3(self, time, a, b, c, d, outcome)
        class(slackwater_run), intent(in) :: self
        real(real64), intent(in) :: time
        real(real64), intent(in), contiguous, target :: a(:, :, :)
        real(real64), intent(in), contiguous, target, optional :: b(:, :, :), c(:, :, :), d(:, :, :)
        integer, intent(out), optional :: outcome
        type(field_list) :: list
        integer(c_int) :: given
        call add(list, c_loc(a), size(a, kind=c_size_t))
        if (present(b)) call add(list, c_loc(b), size(b, kind=c_size_t))
        if (present(c)) call add(list, c_loc(c), size(c, kind=c_size_t))
        if (present(d)) call add(list, c_loc(d), size(d, kind=c_size_t))
        given = c_post_double(self%handle, time, list%fields, list%n_fields, list%n_points)
        if (present(outcome)) outcome = given
    end subroutine post_real64_3
end module slackwater
