"""Compiled code: numbers in, numbers out.

Rules of this folder: nothing of ours is imported from outside it, nothing is raised, nothing
is printed; arrays come in allocated; state goes in and comes out in one array; every function
is compiled through ``jit`` and runs as plain Python through ``.py_func``.

Glossary of symbols
-------------------
u          drive voltage of a half: drive node minus output node (mirrored in the lower half)
h          headroom of a half: its rail minus output node (mirrored in the lower half)
i_out      current a half pushes into the output node
i_drive    current a half pushes back into the drive node
v_o, v_d   voltage of output node and drive node
v_x        voltage behind the op-amp's output resistance (the integrator's state)
hd         half a time step
g_l, i_l   load as a companion model: i_load = g_l v_o + i_l
"""
