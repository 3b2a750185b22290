"""A site's files to start from: a commented site.toml, loops.csv and specs.csv.

They are data of the package ``audit.starter``. Copy all three into a folder of your own, then put
in your exports, loops and limits. The plant in them is invented.
"""
